import { describe, expect, it } from "vitest";
import { columnBetween, wavelengthBreaks } from "../../src/calibration/wavelengthBreaks.js";

const nx = 50;
/** Row k: λ = 6000 + 3k + sign·(2x + 0.01x²). */
const rows = (sign: number) =>
  Float64Array.from({ length: 4 * nx }, (_, i) => {
    const [k, x] = [Math.floor(i / nx), i % nx];
    return k === 2 ? Number.NaN : 6000 + 3 * k + sign * (2 * x + 0.01 * x * x);
  });

describe.each([1, -1])("breaks some pixels apart, sign %i", (sign) => {
  const image = rows(sign);
  it("rise from the least wavelength to the greatest, as wide as pixels of the middle fibre", () => {
    const breaks = wavelengthBreaks(image, nx, [0, 1, 2, 3], 0.5);
    const known = Array.from(image).filter(Number.isFinite);
    expect(breaks[0]).toBeLessThanOrEqual(Math.min(...known));
    expect(breaks[0]).toBeGreaterThan(Math.min(...known) - 2);
    expect(breaks[breaks.length - 1]).toBeGreaterThanOrEqual(Math.max(...known));
    for (let i = 1; i < breaks.length; i++) {
      const width = breaks[i] - breaks[i - 1];
      expect(width).toBeGreaterThan(0.98);
      expect(width).toBeLessThan(1.55);
    }
  });

  it("columns that see a wavelength, between whole ones too", () => {
    const at = (x: number) => 6009 + sign * (2 * x + 0.01 * x * x);
    expect(columnBetween(image, 3 * nx, nx, at(17))).toBeCloseTo(17, 9);
    expect(columnBetween(image, 3 * nx, nx, (at(17) + at(18)) / 2)).toBeCloseTo(17.5, 9);
    expect(columnBetween(image, 3 * nx, nx, at(49))).toBeCloseTo(49, 9);
    expect(columnBetween(image, 3 * nx, nx, at(49.1))).toBeNaN();
    expect(columnBetween(image, 3 * nx, nx, at(-0.1))).toBeNaN();
    expect(columnBetween(image, 2 * nx, nx, 6010)).toBeNaN();
  });
});
