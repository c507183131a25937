/** rebin and tables as commands. */
import { existsSync, mkdtempSync, readdirSync, readFileSync, rmSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { jsonSchemas } from "../../src/commands/json.js";
import { readImage } from "../../src/fits/image.js";
import { kill, productBytes, spectraOf } from "../calibration/products.js";
import { hatchel } from "./spawned.js";

let cwd: string;
const nFibre = 5;
const nx = 90;
const spectra = spectraOf(nFibre, nx, (k, x) => 100 + k + x);
kill(spectra, 3);
const wavelengths = Float64Array.from(
  { length: nFibre * nx },
  (_, i) => 5000 + 1.25 * (i % nx) + 0.3 * Math.floor(i / nx),
);
const targets = [{ name: "M 1", fibres: [1, 2, 4] }];

beforeAll(() => {
  cwd = mkdtempSync(join(tmpdir(), "hatchel-rebin-"));
  writeFileSync(join(cwd, "s.fits"), productBytes({ spectra, wavelengths, targets }));
  writeFileSync(join(cwd, "raw.fits"), productBytes({ spectra }));
});
afterAll(() => rmSync(cwd, { recursive: true }));

describe("rebin", () => {
  test("tells its grid and the noise that bins share", async () => {
    const run = hatchel(["rebin", "s.fits", "-o", "log.fits", "--grid", "log", "--step", "75km/s", "--json"], { cwd });
    expect(run.stderr).toBe("");
    const json = jsonSchemas.rebin.parse(JSON.parse(run.stdout));
    expect(json.grid).toMatchObject({ kind: "log", medium: "air", start: 5000 });
    expect(json.grid.kmPerSecond).toBeCloseTo(75, 9);
    expect(json.grid.step).toBeCloseTo(75 / 299792.458, 12);
    expect(json.fibres).toBe(nFibre);
    // Bins of a pixel's width at places all over it: correlation u(1−u)/… between 0 and 1/2.
    expect(json.neighbourCorrelation).toBeGreaterThan(0.05);
    expect(json.neighbourCorrelation).toBeLessThan(0.5);
    const history = (await readImage(join(cwd, "log.fits"), { hdu: "FLUX" })).primaryHeader.cards;
    expect(history.map(({ comment }) => comment).join("\n")).toMatch(/option grid log air start 5000 step 0\.00025/);
    const again = hatchel(["rebin", "s.fits", "-o", "again.fits", "--grid", "log", "--step", "75km/s", "--quiet"], {
      cwd,
    });
    expect(again.code).toBe(0);
    expect(readFileSync(join(cwd, "again.fits")).equals(readFileSync(join(cwd, "log.fits")))).toBe(true);
  });

  test("turns air into vacuum, for people too", () => {
    const run = hatchel(["rebin", "s.fits", "-o", "vacuum.fits", "--medium", "vacuum"], { cwd });
    // 5000 Å in air is 5001.394 Å in vacuum (Ciddor 1996; published tables, from memory: n − 1 = 2.789e-4 there).
    expect(run.stdout).toMatch(/grid +linear, \d+ bins, 5001\.39\d to \d+\.\d+ Å in vacuum/);
    expect(run.stdout).toMatch(/shared noise +correlation 0\.\d+ with the next bin \(BIN_COV\)/);
  });

  test.each([
    [
      ["raw.fits"],
      "hatchel: raw.fits: there are no wavelengths (HDU WAVELENGTH); extract the frame with --wavelengths to have them.",
      1,
    ],
    [
      ["log.fits"],
      "hatchel: log.fits: these spectra were rebinned before, and would be broadened twice; rebin those that they were made from.",
      1,
    ],
    [
      ["s.fits", "--step", "30km/s"],
      "hatchel rebin: --step is in km/s, but the grid is linear; give it in Å, or --grid log.",
      2,
    ],
    [
      ["s.fits", "--grid", "log", "--step", "0.5"],
      "hatchel rebin: --step is in Å, but the grid is log; give it as 30km/s or 1e-4ln, or --grid linear.",
      2,
    ],
    [
      ["s.fits", "--step", "fine"],
      "hatchel: --step is 'fine'; it must be a number over 0, as 0.5, 30km/s or 1e-4ln.",
      2,
    ],
    [["s.fits", "--grid", "cubic"], "hatchel: --grid is 'cubic'; it must be linear or log.", 2],
    [
      ["s.fits", "--start", "5200", "--end", "5100"],
      "hatchel: The grid would run from 5200 to 5100 Å; give an end above the start, both over 0.",
      1,
    ],
  ])("refuses %j", (args, sentence, code) => {
    const run = hatchel(["rebin", ...args, "-o", "none.fits"], { cwd });
    expect(run).toMatchObject({ code, stdout: "", stderr: `${sentence}\n` });
    expect(existsSync(join(cwd, "none.fits"))).toBe(false);
  });
});

describe("tables", () => {
  test("are one a fibre with light and one a target", () => {
    const run = hatchel(["tables", "s.fits", "-o", "t", "--json"], { cwd });
    const json = jsonSchemas.tables.parse(JSON.parse(run.stdout));
    expect(json.leftOut).toEqual([4]);
    expect(json.tables.map(({ file }) => file)).toEqual([
      ...["fibre_1.ecsv", "fibre_2.ecsv", "fibre_3.ecsv", "fibre_5.ecsv", "target_M_1.ecsv"],
    ]);
    expect(readdirSync(join(cwd, "t")).sort()).toEqual(json.tables.map(({ file }) => file));
    // Fibres 1 and 2 lie 0.24 px apart.
    expect(json.warnings).toEqual([
      "target 'M 1': in 90 of 90 columns its fibres differ in wavelength by over 0.1 px, so that their sum has none there; rebin the spectra first.",
    ]);
    const rebinned = hatchel(["tables", "vacuum.fits", "-o", "t2", "--form", "fits", "--fibres", "2-3,5"], { cwd });
    expect(rebinned.stdout).toMatch(/^t2: 4 tables of vacuum\.fits\n/);
    expect(rebinned.stdout).toMatch(/columns +column, wavelength, flux, flux_error, flags, covariance/);
    expect(rebinned.stderr).toBe("");
  });

  test("are not written over unasked, nor of fibres that are not there", () => {
    const again = hatchel(["tables", "s.fits", "-o", "t"], { cwd });
    expect(again.code).toBe(1);
    expect(again.stderr).toMatch(/fibre_1\.ecsv: this file exists already; give another name, or --force/);
    const beyond = hatchel(["tables", "s.fits", "-o", "t", "--fibres", "3,9"], { cwd });
    expect(beyond.stderr).toBe("hatchel: s.fits: --fibres names slit position 9, but there are 1 to 5.\n");
    const wrong = hatchel(["tables", "s.fits", "-o", "t", "--fibres", "0-3"], { cwd });
    expect(wrong).toMatchObject({
      code: 2,
      stderr: "hatchel: --fibres is '0-3'; it must be slit positions from 1 and ranges of them, as 3,7-12.\n",
    });
  });
});
