/** Throughput and sky end to end on a small night whose wavelengths are known; and what the options refuse. */
import { mkdtempSync, readFileSync, rmSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { readThroughput } from "../../src/calibration/throughputFile.js";
import { jsonSchemas } from "../../src/commands/json.js";
import { encodeFits } from "../../src/fits/encode.js";
import { readImage } from "../../src/fits/image.js";
import { readTable } from "../../src/fits/table.js";
import { legendreArgument, legendreFit } from "../../src/reference/legendre.js";
import { simulateExposure } from "../../src/simulate/exposure.js";
import { parseScene } from "../../src/simulate/scene.js";
import { fitsverify, judgeMissing } from "../judges.js";
import { hatchel, SMALL_SCENE } from "./spawned.js";

const SCENE = SMALL_SCENE.replace("sky = [3]", "sky = [3, 6, 10, 13, 17]")
  .replace("range = [5500, 6500]", "range = [6200, 6500]")
  .replace("faintest = 30", "sky_level = 200\nsky_line = 30000\nfaintest = 30")
  .replace("brightest = 3e4", "brightest = 2e3")
  .replace("throughput_rms = 0.05", "throughput_rms = 0.08\nthroughput_slope = 0.05\ntwilight_rate = 4000")
  .concat('[[exposure]]\nname = "twi_01"\nkind = "twilight"\nseconds = 5\n');
const RAW = "night/raw";
const KNOWN = ["--spectrograph", "night/spectrograph.toml", "--bias", `${RAW}/bias_01.fits`, `${RAW}/bias_02.fits`];
const FRAME = ["extract", `${RAW}/sci_01.fits`, "--tramlines", "tramlines.fits", "-o"];
const WAVES = ["--wavelengths", "wavelengths.fits"];
const THROUGHPUT = ["--throughput", "throughput.fits"];
let cwd: string;

const run = (...args: string[]) => hatchel(args, { cwd });
function good(...args: string[]) {
  const done = run(...args);
  if (done.code !== 0) throw new Error(`exit code ${done.code}: ${done.stderr}`);
  return done;
}
const truth = (name: string) => simulateExposure(parseScene(SCENE, "bench"), name).truth;

/** The file that 'hatchel arc' writes, from the truth. */
function writeTrueWavelengths(name: string, digest: string): void {
  const { wave, nFibre, nx } = truth("arc_01");
  const t = Float64Array.from({ length: nx }, (_, x) => legendreArgument(x, nx));
  const legendre = new Float64Array(5 * nFibre);
  for (let k = 0; k < nFibre; k++) {
    legendre.set(legendreFit(t, wave.subarray(k * nx, (k + 1) * nx), new Float64Array(nx).fill(1), 5), 5 * k);
  }
  const each = (value: number) => new Float64Array(nFibre).fill(value);
  const cards = Object.entries({ WAVEVERS: 1, TRAMGEOM: digest, WAVENX: nx, WAVEMED: "air" });
  const numbers = { RMS: 0.01, ERROR: 0.005, SEEN_FROM: 0, SEEN_TO: nx - 1, FWHM: 2.2 };
  const bytes = encodeFits([
    { kind: "primary", header: cards.map(([keyword, value]) => ({ keyword, value, comment: "" })) },
    {
      kind: "table",
      name: "WAVELENGTHS",
      columns: [
        { name: "FIBRE", format: "1J", data: Int32Array.from({ length: nFibre }, (_, k) => k + 1) },
        { name: "STATE", format: "8A", data: new Array<string>(nFibre).fill("fitted") },
        { name: "LEGENDRE", format: "5D", data: legendre },
        { name: "NLINE", format: "1J", data: new Int32Array(nFibre).fill(20) },
        ...Object.entries(numbers).map(([column, value]) => ({ name: column, format: "1D", data: each(value) })),
      ],
    },
  ]);
  writeFileSync(join(cwd, name), bytes);
}

beforeAll(async () => {
  cwd = mkdtempSync(join(tmpdir(), "hatchel-"));
  writeFileSync(join(cwd, "scene.toml"), SCENE);
  good("simulate", "scene.toml", "-o", "night", "--quiet");
  good("trace", `${RAW}/fflat_01.fits`, `${RAW}/fflat_02.fits`, "-o", "tramlines.fits", ...KNOWN, "--quiet");
  const table = await readTable(join(cwd, "tramlines.fits"), "TRAMLINES");
  writeTrueWavelengths("wavelengths.fits", String(table.primaryHeader.get("TRAMGEOM")));
  writeTrueWavelengths("foreign.fits", "other");
  good(
    "throughput",
    `${RAW}/twi_01.fits`,
    "--tramlines",
    "tramlines.fits",
    ...WAVES,
    "-o",
    "throughput.fits",
    ...KNOWN,
    "--quiet",
  );
}, 240_000);
afterAll(() => rmSync(cwd, { recursive: true }));

const image = async (file: string, hdu: string) => (await readImage(join(cwd, file), { hdu })).data;

describe("throughput", () => {
  test("is near the truth, and the same bytes whenever it is measured", async () => {
    const { relative, nFibre, nx } = await readThroughput(join(cwd, "throughput.fits"));
    const { throughput, lit } = truth("twi_01");
    const off = Array.from({ length: nFibre }, (_, k) => k)
      .filter((k) => lit[k])
      .map((k) => relative[k * nx + 100] / throughput[k * nx + 100]);
    const middle = [...off].sort((a, b) => a - b)[off.length >> 1];
    expect(Math.max(...off.map((ratio) => Math.abs(ratio / middle - 1)))).toBeLessThan(0.015);
    expect(relative[8 * nx + 100]).toBeNaN();
    good(
      "throughput",
      `${RAW}/twi_01.fits`,
      "--tramlines",
      "tramlines.fits",
      ...WAVES,
      "-o",
      "again.fits",
      ...KNOWN,
      "--threads",
      "1",
      "--quiet",
    );
    expect(readFileSync(join(cwd, "again.fits"))).toEqual(readFileSync(join(cwd, "throughput.fits")));
  }, 60_000);

  test("takes shapes from fibre flats, and says what it did", () => {
    const flats = ["--shape", `${RAW}/fflat_01.fits`, `${RAW}/fflat_02.fits`];
    const { stdout } = good(
      "throughput",
      `${RAW}/twi_01.fits`,
      "--tramlines",
      "tramlines.fits",
      ...WAVES,
      ...flats,
      "-o",
      "both.fits",
      ...KNOWN,
      "--json",
    );
    const json = jsonSchemas.throughput.parse(JSON.parse(stdout));
    expect(json.shapeFrames).toEqual(["fflat_01.fits", "fflat_02.fits"]);
    expect(json.levels).toHaveLength(19);
    expect(json.levels[8].throughput).toBeNull();
    expect(json.weakFibres).toEqual([]);
    expect(json.medianError).toBeLessThan(0.005);
  }, 60_000);
});

describe("extract", () => {
  test("takes off the sky: what is left is the targets', flagged and described", async () => {
    const { stdout } = good(...FRAME, "sky.fits", ...WAVES, ...THROUGHPUT, "--sky", "on", ...KNOWN, "--json");
    const { calibration } = jsonSchemas.extract.parse(JSON.parse(stdout));
    expect(calibration).toMatchObject({ medium: "air", throughput: true });
    expect(calibration?.sky).toMatchObject({ fibres: 5, leftOut: [], scaled: false });
    expect(calibration?.sky?.pullBetween).toBeGreaterThan(0.8);
    expect(calibration?.sky?.pullBetween).toBeLessThan(1.3);
    const [flux, variance, wavelengths, sky] = await Promise.all(
      ["FLUX", "FLUX_VAR", "WAVELENGTH", "SKY"].map((hdu) => image("sky.fits", hdu)),
    );
    const { wave, nx } = truth("sci_01");
    const pulls = [2, 5, 9, 12, 16].flatMap((k) =>
      Array.from(flux.subarray(k * nx, (k + 1) * nx), (f, x) => Math.abs(f) / Math.sqrt(variance[k * nx + x])),
    );
    const known = pulls.filter(Number.isFinite).sort((a, b) => a - b);
    expect(known.length).toBeGreaterThan(900);
    expect(1.4826 * known[known.length >> 1]).toBeGreaterThan(0.85);
    expect(1.4826 * known[known.length >> 1]).toBeLessThan(1.2);
    expect(wavelengths[4 * nx + 50]).toBeCloseTo(wave[4 * nx + 50], 2);
    expect(sky[4 * nx + 50]).toBeGreaterThan(100);
    const levels = (await readTable(join(cwd, "sky.fits"), "POSITIONS")).columns.find(
      ({ name }) => name === "THROUGHPUT",
    );
    expect(Number(levels?.data[3])).toBeGreaterThan(0.5);
  }, 60_000);

  test.skipIf(judgeMissing("fitsverify"))(
    "writes a sound file, which says whose rest frame it is in",
    async () => {
      good(...FRAME, "scaled.fits", ...WAVES, ...THROUGHPUT, "--sky", "scaled", ...KNOWN, "--quiet");
      expect(fitsverify(join(cwd, "scaled.fits"))).toEqual([]);
      const { header } = await readImage(join(cwd, "scaled.fits"), { hdu: "WAVELENGTH" });
      expect([header.text("SPECSYS"), header.text("MEDIUM"), header.text("BUNIT")]).toEqual([
        "TOPOCENT",
        "air",
        "Angstrom",
      ]);
      const { primaryHeader } = await readImage(join(cwd, "scaled.fits"), { hdu: "FLUX" });
      expect(primaryHeader.text("SKYSUB")).toBe("scaled");
      const history = primaryHeader.cards.filter(({ keyword }) => keyword === "HISTORY").map(({ comment }) => comment);
      expect(history.join("\n")).toContain("option sky scaled");
      expect(history.join("\n")).toContain("input wavelengths.fits checksum");
    },
    60_000,
  );

  test("refuses in one sentence what cannot be done", () => {
    const refused = (...args: string[]) => {
      const { code, stderr } = run(...FRAME, "no.fits", ...args);
      expect(code).not.toBe(0);
      return stderr;
    };
    expect(refused("--sky", "on", ...KNOWN)).toContain(
      "--sky on is given without --wavelengths; reduce an arc with 'hatchel arc' and give its wavelengths.",
    );
    expect(refused(...THROUGHPUT, ...KNOWN)).toContain("--throughput is given without --wavelengths");
    expect(refused("--sky", "yes", ...WAVES, ...KNOWN)).toContain("--sky is 'yes'; it must be on, off or scaled.");
    const toml = readFileSync(join(cwd, "night/spectrograph.toml"), "utf8");
    writeFileSync(join(cwd, "night/skyless.toml"), toml.replace(/^sky = .*$/m, ""));
    expect(refused(...WAVES, "--sky", "on", "--spectrograph", "night/skyless.toml", ...KNOWN.slice(2))).toContain(
      "skyless.toml: --sky on, but 'slit.sky' names no fibres; list the slit positions that see only sky there, as 'sky = [3, 11]' under [slit].",
    );
    expect(refused(...WAVES, "--sky", "on", ...KNOWN.slice(2))).toContain(
      "--sky on, but no spectrograph file is given",
    );
    expect(refused("--wavelengths", "foreign.fits", ...KNOWN)).toContain(
      "sci_01.fits: 19 fibres × 200 columns, but the wavelengths given belong to another readout window",
    );
    expect(refused("--wavelengths", "throughput.fits", ...KNOWN)).toContain("throughput.fits");
  }, 60_000);
});
