import { expect, it } from "vitest";
import { fitLineWidths, type WidthPoint, widthAt } from "../../src/calibration/lineWidths.js";
import { openStream } from "../../src/random/streams.js";

const nFibre = 20;
const nx = 501;
const slit = Float64Array.from({ length: nFibre }, (_, k) => (2 * k) / (nFibre - 1) - 1);
const truth = (x: number, s: number) => {
  const t = x / 250 - 1;
  return 2.4 + 0.1 * t + 0.2 * t * t - 0.05 * s + 0.04 * t * s;
};

function made(scatter: number): WidthPoint[] {
  const dice = openStream(8, "widths");
  return Array.from({ length: 15 * nFibre }, (_, i) => {
    const [fibre, x] = [i % nFibre, 10 + 480 * dice.uniform()];
    const fwhmError = 0.005 + 0.02 * dice.uniform();
    const off = Math.sqrt(fwhmError ** 2 + scatter ** 2) * dice.normal();
    // Every tenth is a blend.
    return { x, fibre, fwhmError, fwhm: truth(x, slit[fibre]) + off + (i % 10 === 3 ? 0.5 : 0) };
  });
}

it("goes through lines' widths, blends passed over", () => {
  const widths = fitLineWidths(made(0), slit, nx)!;
  for (const [fibre, x] of [
    [0, 20],
    [7, 250],
    [19, 480],
  ]) {
    expect(Math.abs(widthAt(widths, fibre, x, nx) - truth(x, slit[fibre]))).toBeLessThan(0.03);
  }
  expect(widths.scatter).toBeLessThan(0.01);
  expect(widths.nLine).toBeLessThanOrEqual(270);
  expect(widths.nLine).toBeGreaterThan(255);
});

it("says what widths scatter beyond their errors", () => {
  expect(fitLineWidths(made(0.03), slit, nx)!.scatter).toBeCloseTo(0.03, 2);
});

it("takes a constant when there are few lines, and nothing from none", () => {
  const few = fitLineWidths(made(0).slice(0, 5), slit, nx)!;
  expect(few.degree).toBe(0);
  expect(few.coefficients).toHaveLength(nFibre);
  expect(fitLineWidths([], slit, nx)).toBeNull();
});
