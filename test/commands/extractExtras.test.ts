/** What 'hatchel extract' adds on request, end to end on a small night. */
import { readFileSync, renameSync, rmSync, writeFileSync } from "node:fs";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { jsonSchemas } from "../../src/commands/json.js";
import { readImage } from "../../src/fits/image.js";
import { listHdus } from "../../src/fits/open.js";
import { readTable } from "../../src/fits/table.js";
import { fitsverify, judgeMissing } from "../judges.js";
import { hatchel, lines, SMALL_SCENE, smallNight } from "./spawned.js";

let cwd: string;
const RAW = "night/raw";
const FRAME = `${RAW}/sci_01.fits`;
const KNOWN = ["--spectrograph", "night/targets.toml", "--bias", `${RAW}/bias_01.fits`, `${RAW}/bias_02.fits`];

/** A second exposure of the field, and a lamp on fibre 12 alone. */
function moreFrames(): void {
  const pair = SMALL_SCENE.replace('name = "sci_01"', 'name = "sci_02"\nbrightness = 0.9');
  const others = Array.from({ length: 19 }, (_, k) => k + 1).filter((fibre) => fibre !== 12);
  const single = SMALL_SCENE.replace("dead = [9]", `dead = [${others.join(", ")}]`).replace(
    '"fflat_01"',
    '"single_12"',
  );
  for (const [name, scene, frame] of [
    ["second", pair, "sci_02"],
    ["alone", single, "single_12"],
  ]) {
    writeFileSync(join(cwd, `${name}.toml`), scene);
    good(["simulate", `${name}.toml`, "-o", name, "--quiet"]);
    renameSync(join(cwd, name, "raw", `${frame}.fits`), join(cwd, RAW, `${frame}.fits`));
  }
}

function good(args: string[]) {
  const run = hatchel(args, { cwd });
  if (run.code !== 0) throw new Error(`exit code ${run.code}: ${run.stderr}`);
  return run;
}

function extract(output: string, ...more: string[]) {
  const run = good(["extract", FRAME, "--tramlines", "tramlines.fits", "-o", output, ...KNOWN, ...more, "--json"]);
  return jsonSchemas.extract.parse(JSON.parse(run.stdout));
}

beforeAll(() => {
  cwd = smallNight();
  moreFrames();
  const toml = readFileSync(join(cwd, "night/spectrograph.toml"), "utf8");
  writeFileSync(join(cwd, "night/targets.toml"), `${toml}\n[slit.targets]\n"star A" = [5, 6, 7]\nM31 = [8, 9, 10]\n`);
  good(["trace", `${RAW}/fflat_01.fits`, `${RAW}/fflat_02.fits`, "-o", "tramlines.fits", ...KNOWN, "--quiet"]);
}, 240_000);
afterAll(() => rmSync(cwd, { recursive: true }));

describe("extract", () => {
  test("adds what is asked for, in one file without fault", async () => {
    const json = extract(
      "all.fits",
      ...["--method", "boxcar", "--pair", `${RAW}/sci_02.fits`, "--single-fibre", `${RAW}/single_12.fits`],
      ...["--write-cosmic-rays", "--write-background"],
    );
    const names = (await listHdus(join(cwd, "all.fits"))).hdus.map(({ name }) => name);
    expect(names.slice(7)).toEqual([
      ...["POSITIONS", "CROSSTALK", "CROSSTALK_MEAN", "CROSSTALK_SEEN", "REJECTED", "SCATTERED", "TARGETS"],
    ]);
    const { primaryHeader } = await readImage(join(cwd, "all.fits"), { hdu: "FLUX" });
    const history = primaryHeader.cards.filter(({ keyword }) => keyword === "HISTORY").map(({ comment }) => comment);
    for (const said of ["pair sci_02.fits", "single-fibre single_12.fits", "write-cosmic-rays", "write-background"]) {
      expect(history.join("\n")).toContain(said);
    }
    // Light of 0.9 times as much: 1/0.9.
    expect(Math.abs(json.pair!.scale! - 1 / 0.9)).toBeLessThan(0.02);
    expect(json.pair!.hitPixels).toBeGreaterThan(0);
    const rejected = await readImage(join(cwd, "all.fits"), { hdu: "REJECTED" });
    expect([rejected.nx, rejected.ny]).toEqual([200, 150]);
    expect(rejected.data.filter((bits) => bits !== 0).length).toBe(json.rejectedPixels);
    const seen = await readTable(join(cwd, "all.fits"), "CROSSTALK_SEEN");
    expect(new Set(seen.columns[1].data as Int32Array)).toEqual(new Set([12]));
    const [leaks] = json.crosstalk!.seen;
    expect(leaks).toMatchObject({ frame: "single_12.fits" });
    expect(leaks.leaks.filter(({ fibre }) => fibre === 11 || fibre === 13)).toHaveLength(2);
    for (const { fibre, share, error, model } of leaks.leaks.filter(({ fibre: f }) => Math.abs(f - 12) === 1)) {
      expect(Math.abs(share! - model!), `fibre ${fibre}`).toBeLessThan(5 * error! + 0.1 * model!);
    }
    expect(json.crosstalk!.modelByDistance[0].share).toBeGreaterThan(0.95);
    expect(json.targets.map(({ name, used }) => [name, used])).toEqual([
      ["star A", [5, 6, 7]],
      ["M31", [8, 10]],
    ]);
  });

  test.skipIf(judgeMissing("fitsverify"))("leaves fitsverify nothing to say", () => {
    expect(fitsverify(join(cwd, "all.fits"))).toEqual([]);
  });

  test("gives joint no cross-talk matrix unless it is asked for", async () => {
    expect(extract("plain.fits").crosstalk).toBeNull();
    const json = extract("asked.fits", "--crosstalk-matrix");
    expect(json.crosstalk).toMatchObject({ estimator: "boxcar", seen: [] });
    expect(json.pair).toBeNull();
    const [plain, asked] = await Promise.all(["plain", "asked"].map((name) => listHdus(join(cwd, `${name}.fits`))));
    const named = ({ hdus }: Awaited<ReturnType<typeof listHdus>>) =>
      hdus.map(({ name }) => name).filter((name) => /CROSS/.test(name));
    expect([named(plain), named(asked)]).toEqual([[], ["CROSSTALK", "CROSSTALK_MEAN"]]);
  });

  test("says in the report where its cross-talk comes from", () => {
    const { stdout } = good([
      ...["extract", FRAME, "--tramlines", "tramlines.fits", "-o", "said.fits", ...KNOWN, "--method", "boxcar"],
      ...["--single-fibre", `${RAW}/single_12.fits`],
    ]);
    expect(stdout).toMatch(
      /^ {2}cross-talk +boxcar, from the profile model: 9\d\.\d\d % of its own light, \d\.\d\d % of/m,
    );
    expect(stdout).toMatch(/seen in single_12\.fits: 12 to 11 \d\.\d+ % ± 0\.\d+ % \(model \d\.\d+ %\), 12 to 13 /);
    expect(stdout).toMatch(/^ {2}target star A +3 fibres, median S\/N \d/m);
  });

  test.each([["--pair", `${RAW}/sci_02.fits`], ["--write-cosmic-rays"]])(
    "refuses %s without cosmic rays",
    (...option) => {
      const run = hatchel(
        ["extract", FRAME, "--tramlines", "tramlines.fits", "-o", "no.fits", ...option, "--cosmic-rays", "off"],
        { cwd },
      );
      expect(run.code).toBe(2);
      expect(lines(run.stderr)).toEqual([
        `hatchel extract: ${option[0]} is about cosmic rays, but --cosmic-rays is off; leave one of the two out.`,
      ]);
    },
  );

  test("refuses a flat with all fibres as a frame of single fibres, in one sentence", () => {
    const run = hatchel(
      [
        ...["extract", FRAME, "--tramlines", "tramlines.fits", "-o", "no.fits", ...KNOWN, "--quiet"],
        ...["--single-fibre", `${RAW}/fflat_01.fits`],
      ],
      { cwd },
    );
    expect(run.code).toBe(1);
    expect(lines(run.stderr).join("\n")).toMatch(
      /fflat_01\.fits: 1[78] of 18 fibres are lit, but a frame with one or a few lit fibres was expected; give such a frame or leave the option out\.$/,
    );
  });

  test("refuses to write on the second frame", () => {
    const pair = `${RAW}/sci_02.fits`;
    const args = ["extract", FRAME, "--tramlines", "tramlines.fits", "-o", pair, "--pair", pair, "--force", "--quiet"];
    const run = hatchel(args, { cwd });
    expect(run.code).toBe(1);
    expect(run.stderr).toContain("the output would be written on an input");
  });
});
