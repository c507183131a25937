/** Closed forms of Legendre polynomials, Abramowitz & Stegun table 22.9: P_2 = (3t² − 1)/2. */
import { describe, expect, it } from "vitest";
import { type WavelengthSolution, wavelengthAt, wavelengthImage } from "../../src/calibration/wavelengths.js";

const solution: WavelengthSolution = {
  nFibre: 2,
  nx: 101,
  medium: "air",
  degree: 2,
  legendre: Float64Array.of(6600, 80, 3, Number.NaN, Number.NaN, Number.NaN),
  nLine: Int32Array.of(12, 0),
  rms: Float64Array.of(0.01, Number.NaN),
  seenFrom: Float64Array.of(4, Number.NaN),
  seenTo: Float64Array.of(95, Number.NaN),
  fwhmDegree: 0,
  fwhm: Float64Array.of(2.2, Number.NaN),
  geometryDigest: "",
};

describe("wavelengths", () => {
  it("follow the series between and beyond whole columns", () => {
    const t = (2 * 30.25) / 100 - 1;
    expect(wavelengthAt(solution, 0, 30.25)).toBeCloseTo(6600 + 80 * t + (3 * (3 * t * t - 1)) / 2, 9);
    expect(wavelengthAt(solution, 0, 100)).toBeCloseTo(6683, 9);
    expect(wavelengthAt(solution, 1, 30)).toBeNaN();
  });

  it("move with the frame's light: what the arc has at x lies at x + zero point", () => {
    const image = wavelengthImage(solution, 0.5);
    expect(image).toHaveLength(202);
    expect(image[40]).toBeCloseTo(wavelengthAt(solution, 0, 39.5), 9);
    expect(image[101]).toBeNaN();
  });
});
