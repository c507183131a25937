/** Frames whose wavelengths differ by a fraction of a pixel. */
import { describe, expect, it } from "vitest";
import { alignFrames } from "../../src/calibration/alignFrames.js";
import { combineSpectra } from "../../src/calibration/combineSpectra.js";
import { normalCumulative } from "../../src/simulate/gaussian.js";
import { spectraOf } from "./products.js";
import { frameOf, mean, productOf } from "./stacks.js";

const nFibre = 3;
const nx = 200;
/** Å; fibre 3 falls. Light at x + shift in a frame that is shifted. */
const wavelength = (k: number, x: number) => (k === 2 ? 6000 - 1.1 * x : 5000 + 20 * k + 1.1 * x + 1e-4 * x * x);
const wavelengths = (shift: number) => ({
  medium: "air" as const,
  image: Float64Array.from({ length: nFibre * nx }, (_, i) => wavelength(Math.floor(i / nx), (i % nx) - shift)),
});
/** Lines of 2.2 px FWHM, integrated over columns, on a slope. */
const lit = (shift: number) => (k: number, x: number) => {
  const sigma = 2.2 / 2.3548;
  let sum = 200 + 0.5 * x + 10 * k;
  for (let c = 20.3; c < nx; c += 25.7) {
    sum += 5000 * (normalCumulative((x + 0.5 - c - shift) / sigma) - normalCumulative((x - 0.5 - c - shift) / sigma));
  }
  return sum;
};
const frame = (shift: number) =>
  productOf(
    `${shift}`,
    spectraOf(nFibre, nx, lit(shift), () => 40),
    { wavelengths: wavelengths(shift) },
  );

describe("frames", () => {
  it("within the tolerance stay as they are, and those beyond are moved onto the first one's columns", () => {
    const [first, near, far] = alignFrames([frame(0), frame(0.03), frame(-0.2)], 0.05);
    expect([first.moved, near.moved, far.moved]).toEqual([false, false, true]);
    expect([first.apart, near.apart, far.apart].map((apart) => Math.round(100 * apart) / 100)).toEqual([0, 0.03, 0.2]);
    expect(near.spectra.flux).toEqual(frame(0.03).spectra.flux);
    let [moved, left] = [0, 0];
    for (let k = 0; k < nFibre; k++) {
      for (let x = 2; x < nx - 2; x++) {
        const peak = 5000 * 0.38;
        moved = Math.max(moved, Math.abs(far.spectra.flux[k * nx + x] - lit(0)(k, x)) / peak);
        left = Math.max(left, Math.abs(lit(-0.2)(k, x) - lit(0)(k, x)) / peak);
      }
    }
    // A fifth of a pixel of a line of 2.2 px is 13 % of its peak; parabolas leave a quarter of that.
    expect(left).toBeGreaterThan(0.11);
    expect(moved).toBeLessThan(0.04);
    // Light is kept: within ends that half a pixel more or less of continuum makes.
    const total = (values: ArrayLike<number>) => mean(values) * values.length;
    const sum = total(far.spectra.flux.subarray(5, 190));
    expect(sum / total(frame(0).spectra.flux.subarray(5, 190))).toBeCloseTo(1, 3);
    // Parabolas at 0.2 px: variance and covariance from their weights, together the variance of what they hold.
    const at = nx + 100;
    expect(far.spectra.variance[at]).toBeLessThan(40);
    expect(far.columnCovariance![at]).toBeGreaterThan(0);
    expect(far.information[at]).toBeCloseTo(40, 6);
  });

  it("that were moved are combined with their covariance, and their lines agree", () => {
    const size: [number, number] = [nFibre, nx];
    const products = [0, 0.15, -0.2, 0.1].map((shift, i) => ({
      ...frameOf(size, lit(shift), `moved ${i}`),
      wavelengths: wavelengths(shift),
    }));
    const { spectra, columnCovariance, frames, warnings } = combineSpectra(products);
    expect(frames.map(({ moved }) => moved)).toEqual([false, true, true, true]);
    for (const { lineShift, lineShiftError } of frames)
      expect(Math.abs(lineShift)).toBeLessThan(4 * lineShiftError + 0.01);
    expect(warnings).toEqual([]);
    // Noise of four frames: errors and covariances against the truth. In 600 points 1/√600 = 4 % each.
    let [squares, products2, n] = [0, 0, 0];
    for (let k = 0; k < nFibre; k++) {
      for (let x = 3; x < nx - 3; x++) {
        const at = k * nx + x;
        const off = (spectra.flux[at] - lit(0)(k, x)) / Math.sqrt(spectra.variance[at]);
        const next = (spectra.flux[at + 1] - lit(0)(k, x + 1)) / Math.sqrt(spectra.variance[at + 1]);
        squares += off * off;
        products2 += off * next - columnCovariance![at] / Math.sqrt(spectra.variance[at] * spectra.variance[at + 1]);
        n++;
      }
    }
    expect(Math.abs(Math.sqrt(squares / n) - 1)).toBeLessThan(0.12);
    expect(Math.abs(products2 / n)).toBeLessThan(0.15);
    expect(mean(columnCovariance!.filter((value) => Number.isFinite(value)))).toBeGreaterThan(0);
  });

  it("without wavelengths are combined column by column", () => {
    const bare = [0, 0.2].map((shift) => ({ ...productOf(`${shift}`, frame(shift).spectra) }));
    const [, other] = alignFrames(bare, 0.05);
    expect([other.moved, other.apart]).toEqual([false, Number.NaN]);
  });
});
