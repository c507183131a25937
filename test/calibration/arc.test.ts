/** From simulated arcs to wavelengths, against the simulator's truth. */
import { beforeAll, describe, expect, it } from "vitest";
import { type ArcResult, measureWavelengths } from "../../src/calibration/arc.js";
import { CalibrationError } from "../../src/calibration/errors.js";
import { lampLines } from "../../src/calibration/lamps.js";
import { airToVacuum } from "../../src/calibration/refraction.js";
import { fwhmAt, wavelengthAt } from "../../src/calibration/wavelengths.js";
import { summariseWavelengths } from "../../src/report/wavelengths.js";
import type { Truth } from "../../src/simulate/exposure.js";
import { type ExtractedArcs, extractArcs } from "./arcScene.js";

const list = lampLines(["Ne", "Ar"]);
let made: ExtractedArcs;
let result: ArcResult;

beforeAll(async () => {
  made = await extractArcs("arc_01", "arc_02");
  result = measureWavelengths(made.exposures, made.tramlines, list, [5750, 7430]);
}, 120_000);

/** Per lit fibre, rms over the columns between its outermost lines, px. */
function misses({ solution }: ArcResult, { wave, nx, lit }: Truth, toMedium = (air: number) => air): number[] {
  return lit.flatMap((alive, k) => {
    if (!alive) return [];
    let [sum, n] = [0, 0];
    for (let x = Math.ceil(solution.seenFrom[k]); x <= solution.seenTo[k]; x++) {
      const perColumn = (wave[k * nx + nx - 1] - wave[k * nx]) / (nx - 1);
      sum += ((wavelengthAt(solution, k, x) - toMedium(wave[k * nx + x])) / perColumn) ** 2;
      n++;
    }
    return [Math.sqrt(sum / n)];
  });
}

describe("wavelengths of two simulated arcs", () => {
  it("are those that the frames were made with", () => {
    const off = misses(result, made.truth);
    expect(off).toHaveLength(21);
    // The simulator's lines and the list come from the same memory of the same tables; those that differ are dropped.
    expect(Math.sqrt(off.reduce((sum, v) => sum + v * v, 0) / off.length)).toBeLessThan(0.004);
    expect(Math.max(...off)).toBeLessThan(0.01);
    expect(result.fit.exposure[1]).toBeCloseTo(-0.04, 2);
    expect(result.solution.legendre[5 * (result.solution.degree + 1)]).toBeNaN();
  });

  it("name no line wrongly", () => {
    const { lines } = made.truth;
    for (const one of result.lines) {
      if (!one.used || one.exposure > 0) continue;
      const own = lines.filter(({ fibre, x }) => fibre === one.fibre && Math.abs(x - one.peak.x) < 1);
      expect(own.some(({ wavelength }) => Math.abs(wavelength - list.wavelength[one.line]) < 0.05)).toBe(true);
    }
    expect(result.lines.filter(({ used }) => used).length).toBeGreaterThan(500);
  });

  it("come with the width of lines and figures of merit", () => {
    expect(fwhmAt(result.solution, 3, 400)).toBeCloseTo(2.3, 1);
    const summary = summariseWavelengths(result);
    expect(summary.lamps.map(({ lamp }) => lamp).sort()).toEqual(["Ar", "Ne"]);
    expect(summary.rmsPixels).toBeLessThan(0.02);
    expect(summary.perPixel).toBeCloseTo(1600 / 819, 1);
    expect(summary.resolution[1]).toBeCloseTo(6600 / (2.3 * summary.perPixel), -2);
    // c = 299792.458 km/s: one pixel in the middle is 6600/1.95 of it.
    expect(summary.rmsKilometresPerSecond / summary.rmsPixels).toBeCloseTo((299792.458 * summary.perPixel) / 6600, -1);
  });

  it("are in vacuum when the list is", () => {
    const vacuum = lampLines(["Ne", "Ar"], undefined, "vacuum");
    const inVacuum = measureWavelengths(made.exposures, made.tramlines, vacuum, [5750, 7430]);
    expect(inVacuum.solution.medium).toBe("vacuum");
    expect(Math.max(...misses(inVacuum, made.truth, airToVacuum))).toBeLessThan(0.01);
  });

  it("are refused from frames without lines", async () => {
    const dark = made.exposures.map(({ name, spectra }) => ({
      name,
      spectra: { ...spectra, flux: spectra.flux.map((_, i) => 3 * ((i % 7) - 3)) },
    }));
    expect(() => measureWavelengths(dark, made.tramlines, list, [5750, 7430])).toThrow(CalibrationError);
    expect(() => measureWavelengths(dark, made.tramlines, list, [5750, 7430])).toThrow("no spectrum has a line");
  });

  it("say so when wavelength runs the other way", () => {
    const turned = measureWavelengths(made.exposures, made.tramlines, list, [7430, 5750]);
    expect(turned.warnings.join()).toContain("the other way round than the range 7430 to 5750 Å says");
    expect(Math.max(...misses(turned, made.truth))).toBeLessThan(0.01);
  });
});
