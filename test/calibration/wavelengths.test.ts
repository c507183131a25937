/** Closed forms of Legendre polynomials, Abramowitz & Stegun table 22.9: P_2 = (3t² − 1)/2. */
import { describe, expect, it } from "vitest";
import {
  columnAt,
  dispersionAt,
  fwhmAt,
  type WavelengthSolution,
  wavelengthAt,
  wavelengthImage,
} from "../../src/calibration/wavelengths.js";

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
  fwhmDegree: 1,
  fwhm: Float64Array.of(2.2, 0.3, Number.NaN, Number.NaN),
  geometryDigest: "",
};

const closed = (x: number) => {
  const t = (2 * x) / 100 - 1;
  return 6600 + 80 * t + (3 * (3 * t * t - 1)) / 2;
};

describe("wavelengths", () => {
  it("follow the series between and beyond whole columns", () => {
    expect(wavelengthAt(solution, 0, 30.25)).toBeCloseTo(closed(30.25), 9);
    expect(wavelengthAt(solution, 0, 100)).toBeCloseTo(6683, 9);
    expect(wavelengthAt(solution, 1, 30)).toBeNaN();
  });

  it("move with the frame's light: what the arc has at x lies at x + zero point", () => {
    const image = wavelengthImage(solution, 0.5);
    expect(image).toHaveLength(202);
    expect(image[40]).toBeCloseTo(closed(39.5), 9);
    expect(image[101]).toBeNaN();
    expect(wavelengthImage(solution, Float64Array.of(-0.25, 0))[40]).toBeCloseTo(closed(40.25), 9);
  });

  it("grow by 80·2/100 + 9·t·2/100 Å per column", () => {
    expect(dispersionAt(solution, 0, 50)).toBeCloseTo(1.6, 9);
    expect(dispersionAt(solution, 0, 75)).toBeCloseTo(1.69, 9);
  });

  it("are found again, on the detector or as far beyond as allowed", () => {
    for (const x of [0, 13.7, 50, 99.99]) expect(columnAt(solution, 0, closed(x))).toBeCloseTo(x, 8);
    expect(columnAt(solution, 0, closed(103))).toBeNaN();
    expect(columnAt(solution, 0, closed(103), 4)).toBeCloseTo(103, 8);
    expect(columnAt(solution, 0, 9000, 1e9)).toBeNaN();
    expect(columnAt(solution, 1, 6600)).toBeNaN();
  });

  it("have lines as wide as the series says", () => {
    expect(fwhmAt(solution, 0, 75)).toBeCloseTo(2.35, 12);
    expect(fwhmAt(solution, 1, 75)).toBeNaN();
  });
});
