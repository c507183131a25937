/** A header that lies about the detector is called out by every command that is given the frames to tell. */
import { readFileSync, rmSync, writeFileSync } from "node:fs";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { hatchel, smallNight } from "./spawned.js";

/** True: gain 1.3 e⁻/ADU, read noise 3.1 e⁻; as it shows in whole counts √(3.1² + 1.3²/12) = 3.12 e⁻. */
const GIVEN = { GAIN1: 1.95, RDNOISE1: 4.03 };
const LIED = "night/raw/lied_";

let cwd = "";
beforeAll(() => {
  cwd = smallNight();
  for (const name of ["bias_01", "bias_02", "fflat_01", "fflat_02", "sci_01"]) lie(name);
}, 120_000);
afterAll(() => rmSync(cwd, { recursive: true, force: true }));

/** A copy whose header gives another gain and read noise: cards of 80 characters, the checksum's removed. */
function lie(name: string): void {
  const file = readFileSync(join(cwd, `night/raw/${name}.fits`));
  for (let at = 0; at < file.length && !file.toString("latin1", at, at + 80).startsWith("END  "); at += 80) {
    const keyword = file.toString("latin1", at, at + 8).trim();
    const given = GIVEN[keyword as keyof typeof GIVEN];
    if (given !== undefined) file.write(`${keyword.padEnd(8)}= ${String(given).padStart(20)}`.padEnd(80), at, "latin1");
    if (keyword === "CHECKSUM" || keyword === "DATASUM") file.write("COMMENT".padEnd(80), at, "latin1");
  }
  writeFileSync(join(cwd, `${LIED}${name}.fits`), file);
}

const GAIN =
  /the gain of amplifier 1 is given as 1\.95 e⁻\/ADU, but (\d\.\d+) ± (0\.\d+) e⁻\/ADU is measured; it makes the error bars of bright light (1\.\d\d) times too small and every flux (1\.\d\d) times too large, so give the right one in the spectrograph file\.$/;
/** At the gain given the frames' scatter is 3.12 · 1.5 = 4.68 e⁻: a given 4.03 is 1.16 times too small for it. */
const READ_NOISE =
  /lied_bias_01\.fits: the read noise of amplifier 1 is given as 4\.03 e⁻, but (4\.[67]\d*) ± 0\.\d+ e⁻ is measured; it makes the error bars of faint light 1\.1[4-8] times too small, so give the right one/;

function warningsOf(args: string[]): string[] {
  const run = hatchel([...args, "--json", "--quiet"], { cwd });
  expect(run.code).toBe(0);
  return JSON.parse(run.stdout).warnings;
}

const BIAS = ["--bias", `${LIED}bias_01.fits`, `${LIED}bias_02.fits`];
const FLATS = [`${LIED}fflat_01.fits`, `${LIED}fflat_02.fits`];

function expectGain(warnings: string[]): void {
  const [, value, error, barsOff, fluxOff] = warnings.map((text) => GAIN.exec(text)).find((found) => found) ?? [];
  expect(Math.abs(Number(value) - 1.3)).toBeLessThan(4 * Number(error));
  expect(Math.abs(Number(barsOff) - Math.sqrt(1.5))).toBeLessThan(0.05);
  expect(Math.abs(Number(fluxOff) - 1.5)).toBeLessThan(0.1);
}

describe("a gain given 1.5 times and a read noise given 1.3 times too large", () => {
  test("is told by look", () => {
    const warnings = warningsOf(["look", `${LIED}sci_01.fits`, ...BIAS, "--flat", ...FLATS]);
    expectGain(warnings);
    // With the gain measured, the read noise is 3.12 e⁻.
    expect(warnings.join("\n")).toMatch(/the read noise of amplifier 1 is given as 4\.03 e⁻, but 3\.[01]\d* ± /);
  });

  test("is told by trace", () => {
    const warnings = warningsOf(["trace", ...FLATS, ...BIAS, "-o", "lied.fits"]);
    expectGain(warnings);
    expect(warnings.filter((text) => READ_NOISE.test(text))).toHaveLength(1);
  });

  test("is told by extract", () => {
    const warnings = warningsOf(["extract", `${LIED}sci_01.fits`, "--flat", ...FLATS, ...BIAS, "-o", "s.fits"]);
    expectGain(warnings);
    expect(warnings.filter((text) => READ_NOISE.test(text))).toHaveLength(1);
  });

  test("is not told of a header that is right", () => {
    const flats = ["night/raw/fflat_01.fits", "night/raw/fflat_02.fits"];
    const bias = ["--bias", "night/raw/bias_01.fits", "night/raw/bias_02.fits"];
    const told = warningsOf(["trace", ...flats, ...bias, "-o", "right.fits"]);
    expect(told.filter((text) => /the (gain|read noise) of amplifier|at the seam/.test(text))).toEqual([]);
  });
});
