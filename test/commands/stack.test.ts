/** hatchel stack and --detector, end to end on a small night. */
import { readFileSync, rmSync, writeFileSync } from "node:fs";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { jsonSchemas } from "../../src/commands/json.js";
import { readImage } from "../../src/fits/image.js";
import { hatchel, smallNight } from "./spawned.js";

let cwd: string;
const RAW = "night/raw";
const TOML = ["--spectrograph", "night/spectrograph.toml"];
const BIAS = ["--bias", `${RAW}/bias_01.fits`, `${RAW}/bias_02.fits`];
const FLATS = ["--flat", `${RAW}/fflat_01.fits`, `${RAW}/fflat_02.fits`];

beforeAll(() => {
  cwd = smallNight();
});
afterAll(() => rmSync(cwd, { recursive: true }));

function good(args: string[]) {
  const run = hatchel(args, { cwd });
  if (run.code !== 0) throw new Error(`exit code ${run.code}: ${run.stderr}`);
  return run;
}

describe("stack", () => {
  test("writes calibrations that extract as the frames do, and tells of them", async () => {
    const run = good(["stack", ...BIAS, ...TOML, "-o", "detector.fits", "--json"]);
    const json = jsonSchemas.stack.parse(JSON.parse(run.stdout));
    expect(json.roles).toHaveLength(1);
    expect(json.roles[0]).toMatchObject({ role: "bias", used: 2, leftOut: 0, unusableShare: 0 });
    expect(json.roles[0].frames.map(({ name, used }) => [name, used])).toEqual([
      ["bias_01.fits", true],
      ["bias_02.fits", true],
    ]);
    // The scene's read noise, 3.1 e⁻, as whole counts of 1.3 e⁻ show it; two frames halve its variance.
    const shown = Math.sqrt(3.1 ** 2 + 1.3 ** 2 / 12);
    for (const { noiseElectrons } of json.roles[0].frames)
      expect(Math.abs(noiseElectrons! / shown - 1)).toBeLessThan(0.04);
    expect(Math.abs(json.roles[0].noise! / (3.1 / Math.SQRT2) - 1)).toBeLessThan(0.02);
    const { value, error } = json.amplifiers[0].readNoise!;
    expect(Math.abs(value - shown)).toBeLessThan(4 * error!);

    good(["extract", `${RAW}/sci_01.fits`, ...FLATS, ...TOML, ...BIAS, "-o", "from-frames.fits", "--quiet"]);
    const detector = ["--detector", "detector.fits"];
    good(["extract", `${RAW}/sci_01.fits`, ...FLATS, ...TOML, ...detector, "-o", "from-file.fits", "--quiet"]);
    for (const hdu of ["FLUX", "FLUX_VAR", "NEIGHBOUR_COV", "FLAGS", "CHI2", "BACKGROUND"]) {
      const [a, b] = [
        await readImage(join(cwd, "from-frames.fits"), { hdu }),
        await readImage(join(cwd, "from-file.fits"), { hdu }),
      ];
      expect(b.data).toEqual(a.data);
    }
    const header = readFileSync(join(cwd, "from-file.fits"), "latin1").slice(0, 28800);
    expect(header).toMatch(/HISTORY option detector detector\.fits +HISTORY/);
    expect(header).toMatch(/HISTORY input detector\.fits checksum [0-9a-f]{16} +HISTORY input bias_01\.fits checksum/);
  });

  test("says in a page what was combined", () => {
    const { stdout } = good(["stack", ...BIAS, ...TOML, "-o", "page.fits"]);
    expect(stdout).toMatch(
      /^page\.fits: detector calibrations\n {2}bias +2 frames; median \S+ ± 2\.2 e⁻ a pixel, at most/,
    );
    expect(stdout).toMatch(/^ {2}1 +1\.300 +– +3\.10 +3\.\d{3} ± 0\.0\d\d$/m);
  });

  test("takes either frames or the file that was made of them", () => {
    const both = hatchel(["trace", `${RAW}/fflat_01.fits`, ...BIAS, "--detector", "page.fits", "-o", "t.fits"], {
      cwd,
    });
    expect([both.code, both.stderr]).toEqual([
      2,
      "hatchel: both --detector and --bias are given; a file of 'hatchel stack' holds all calibrations: make it with --bias, or leave it out.\n",
    ]);
    const nothing = hatchel(["stack", "-o", "n.fits"], { cwd });
    expect([nothing.code, nothing.stderr]).toEqual([
      2,
      "hatchel stack: no frames are given; name some with --bias, --dark or --pixel-flat.\n",
    ]);
  });

  test("refuses what is no such file, and to write on its inputs", () => {
    writeFileSync(join(cwd, "copy.fits"), readFileSync(join(cwd, RAW, "bias_01.fits")));
    const raw = hatchel(["trace", `${RAW}/fflat_01.fits`, "--detector", "copy.fits", "-o", "t.fits"], { cwd });
    expect(raw.code).toBe(1);
    expect(raw.stderr).toMatch(
      /copy\.fits: this is no file of detector calibrations; give one that 'hatchel stack' wrote/,
    );
    const onInput = hatchel(["stack", "--bias", "copy.fits", ...TOML, "-o", "copy.fits", "--force"], { cwd });
    expect(onInput.stderr).toContain("the output would be written on an input");
  });
});
