/** A simulated night with crowded fibres from raw frames to spectra without sky: error bars against the truth, sky as it is and
 * scaled line by line; and that rebinned spectra and tables come out of it and can be read elsewhere. */
import { readdirSync, rmSync, writeFileSync } from "node:fs";
import { join } from "node:path";
import { afterAll, beforeAll, expect, test } from "vitest";
import { readProduct } from "../../src/calibration/spectraProduct.js";
import { UNUSABLE } from "../../src/extraction/spectra.js";
import { readPlan } from "../../src/night/plan.js";
import { planText } from "../../src/night/planText.js";
import { proposePlan } from "../../src/night/proposal.js";
import { type NightOutcome, runNight } from "../../src/night/run.js";
import { MAKERS } from "../../src/night/stages.js";
import { median } from "../../src/reference/median.js";
import { simulateExposure } from "../../src/simulate/exposure.js";
import { writeSimulation } from "../../src/simulate/files.js";
import { parseScene } from "../../src/simulate/scene.js";
import { ARC_SCENE } from "../calibration/arcScene.js";
import { judgeMissing, python } from "../judges.js";
import { freshFolder } from "./frames.js";

const exposure = (name: string, kind: string, seconds: number, more = "") =>
  `[[exposure]]\nname = "${name}"\nkind = "${kind}"\nseconds = ${seconds}\n${more}`;
const SCENE = [
  ARC_SCENE.slice(0, ARC_SCENE.indexOf("[[exposure]]"))
    .replace("sky = [3, 12]", "sky = [2, 8, 12, 15, 20]")
    .replace("throughput_rms = 0.05", "throughput_rms = 0.05\nthroughput_slope = 0.05\ntwilight_rate = 6000"),
  exposure("bias_01", "bias", 0),
  exposure("bias_02", "bias", 0),
  exposure("fflat_01", "fibre-flat", 10),
  exposure("fflat_02", "fibre-flat", 10),
  exposure("arc_01", "arc", 20),
  exposure("twi_01", "twilight", 5),
  exposure("sci_01", "science", 900, 'object = "north"\ndispersion_shift = 0.11\n'),
  exposure("sci_02", "science", 900, 'object = "south"\ndispersion_shift = -0.05\n'),
].join("");
const scene = parseScene(SCENE, "bench");
/** The same targets under no sky. */
const skyless = parseScene(
  SCENE.replace("sky_level = 20", "sky_level = 0").replace("sky_line = 20000", "sky_line = 0"),
  "skyless bench",
);

let folder: string;
let outcome: NightOutcome;
beforeAll(async () => {
  folder = freshFolder();
  await writeSimulation(folder, scene);
  const plan = planText(await proposePlan(join(folder, "raw")), folder)
    .replace(/^name = "south".*$/m, 'name = "south"\nsky = "scaled"')
    .concat('rebin = "log"\ntables = "ecsv"\n');
  writeFileSync(join(folder, "night.toml"), plan);
  const make = async (job: Parameters<Awaited<ReturnType<(typeof MAKERS)[string]>>>[0]) =>
    (await MAKERS[job.stage]())(job);
  const read = await readPlan(join(folder, "night.toml"));
  outcome = await runNight(read, join(folder, "out"), { version: "0", atOnce: 1, make });
}, 120_000);
afterAll(() => rmSync(folder, { recursive: true }));

test("is made whole, one field with the sky scaled", async () => {
  expect(outcome.summary.nFailed).toBe(0);
  const kinds = await Promise.all(
    ["sci_01", "sci_02"].map(async (name) =>
      (await readProduct(join(folder, `out/${name}.spectra.fits`))).primaryHeader.text("SKYSUB"),
    ),
  );
  expect(kinds).toEqual(["on", "scaled"]);
});

test.each(["sci_01", "sci_02"])(
  "%s: error bars without sky, of targets and of sky fibres, at lines and between",
  async (name) => {
    const { spectra, sky } = await readProduct(join(folder, `out/${name}.spectra.fits`));
    const { flux, variance, flags, nx, nFibre } = spectra;
    const { truth } = simulateExposure(skyless, name);
    const lit = Array.from({ length: nFibre }, (_, k) => k).filter((k) => truth.lit[k]);
    const level = Float64Array.from({ length: nx }, (_, x) => median(lit.map((k) => truth.throughput[k * nx + x])));
    const skyLevel = median(sky!.filter(Number.isFinite));
    const pulls: Record<string, number[]> = { targets: [], skies: [], lines: [] };
    for (const k of lit) {
      for (let x = 0; x < nx; x++) {
        const i = k * nx + x;
        if ((flags[i] & UNUSABLE) !== 0 || !Number.isFinite(flux[i])) continue;
        const pull = (flux[i] - (truth.flux[i] / truth.throughput[i]) * level[x]) / Math.sqrt(variance[i]);
        pulls[truth.sky[k] ? "skies" : "targets"].push(pull);
        if (sky![i] > 3 * skyLevel) pulls.lines.push(pull);
      }
    }
    for (const kind of ["targets", "skies", "lines"]) {
      const spread = 1.4826 * median(pulls[kind].map(Math.abs));
      expect(pulls[kind].length, kind).toBeGreaterThan(500);
      expect(spread, kind).toBeGreaterThan(0.95);
      // At lines 1.14 without scaling: what more there is than noise has no certain cause yet.
      expect(spread, kind).toBeLessThan(1.15);
    }
  },
);

test.skipIf(judgeMissing("astropy"))("rebinned spectra and tables are what astropy reads", async () => {
  const out = join(folder, "out");
  const file = readdirSync(out).find((name) => /sci_02.*\.log\.fits$/.test(name))!;
  const tables = readdirSync(out).find((name) => /sci_02.*\.tables$/.test(name))!;
  const script = `
import glob, json, sys
import numpy as np
from astropy.io import fits
from astropy.table import Table
with fits.open(sys.argv[1]) as hdus:
    flux, header = hdus["FLUX"].data, hdus["FLUX"].header
    rows = [Table.read(p, format="ascii.ecsv") for p in sorted(glob.glob(sys.argv[2] + "/fibre_*.ecsv"))]
    table = Table.read(sys.argv[2] + "/fibre_04.ecsv", format="ascii.ecsv")
    same = np.allclose(np.asarray(table["flux"]), flux[3], rtol=1e-5, equal_nan=True)
    print(json.dumps([flux.shape[0], header["CTYPE1"], len(rows), table.colnames, bool(same), int(np.isfinite(flux[3]).sum())]))
`;
  const [rows, axis, nTables, columns, same, n] = JSON.parse(python(script, [join(out, file), join(out, tables)]));
  expect([rows, axis, nTables, same]).toEqual([22, "AWAV-LOG", 21, true]);
  expect(columns).toContain("flux");
  expect(n).toBeGreaterThan(700);
});
