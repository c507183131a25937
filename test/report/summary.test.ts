/** Summaries of tramlines and spectra, counted by hand. */
import { describe, expect, test } from "vitest";
import { Flag } from "../../src/extraction/spectra.js";
import { countFibres, medianFwhm, summariseSpectra, tramlineHeights } from "../../src/report/summary.js";
import type { Tramlines } from "../../src/tramlines/tramlines.js";

const tramlines: Tramlines = {
  ...{ nx: 5, ny: 40, nFibre: 4, degree: 2, geometryDigest: "" },
  fibre: Int32Array.of(1, 2, 3, 4),
  state: ["lit", "dead", "dim", "lit"],
  block: Int32Array.of(1, 1, 2, 2),
  legendre: Float64Array.of(10, 2, 1, 15, 2, 1, 20, 2, 1, 25, 2, 1),
  seenFrom: new Int32Array(4),
  seenTo: new Int32Array(4).fill(4),
  rms: new Float64Array(4),
  nPoint: new Int32Array(4),
  // σ in the middle column, where P1 is 0 and P2 is −1/2: 0.9, 9, 1.1 and 1.5.
  profile: {
    kind: "gaussian",
    sigma: Float64Array.of(1, 0.1, 0.2, 9, 0, 0, 1.2, 0.3, 0.2, 1.5, 0, 0),
    widthDegree: 2,
    relativeError: 0,
  },
};

const spectra = {
  ...{ nFibre: 4, nx: 5, method: "joint" as const, crosstalkCorrected: true },
  flux: Float64Array.from({ length: 20 }, (_, i) => (Math.floor(i / 5) + 1) * 10 + (i % 5)),
  variance: new Float64Array(20).fill(4),
  neighbourCovariance: new Float64Array(20),
  flags: new Int32Array(20),
  chi2: new Float64Array(20),
  background: new Float64Array(20),
};
spectra.flags.fill(Flag.dead, 5, 10);
spectra.flags[0] = Flag.cosmicRay | Flag.badPixel;
spectra.flags[1] = Flag.cosmicRay | Flag.weightLost;
spectra.flags[19] = Flag.saturated;

describe("tramlines in numbers", () => {
  test("fibres are counted by state, positions from 1", () => {
    expect(countFibres(tramlines)).toEqual({
      ...{ positions: 4, blocks: 2, lit: 2, dim: 1, dead: 1 },
      ...{ dimPositions: [3], deadPositions: [2] },
    });
  });

  test("the width is that of the fibres with light, in the middle column", () => {
    // σ 0.9, 1.1, 1.5; FWHM = 2 √(2 ln 2) σ.
    expect(medianFwhm(tramlines)).toBeCloseTo(2 * Math.sqrt(2 * Math.log(2)) * 1.1, 12);
  });

  test("heights follow the Legendre series", () => {
    const y = tramlineHeights(tramlines);
    expect(y).toHaveLength(20);
    // Fibre 3 at the first column, t = −1: 20 − 2 + 1; at column 3, t = 1/2: 20 + 1 + (3/4 − 1)/2.
    expect(y[10]).toBeCloseTo(19, 12);
    expect(y[13]).toBeCloseTo(20.875, 12);
  });
});

describe("spectra in numbers", () => {
  const summary = summariseSpectra(spectra, tramlines);

  test("points and flags are those of fibres that are not dead", () => {
    expect(summary).toMatchObject({ nPoint: 15, nUsable: 13 });
    expect(summary.flags).toEqual({
      ...{ cosmicRay: 2, badPixel: 1, neighbourSaturated: 0, extrapolated: 0, varianceUnsettled: 0 },
      ...{ saturated: 1, weightLost: 1, dead: 0, outside: 0, noWavelength: 0 },
    });
    expect(Array.from(summary.fibreUsableShare)).toEqual([0.8, 0, 1, 0.8]);
  });

  test("signal to noise is the median of each fibre's usable points", () => {
    // Fibre 1: (10, 12, 13, 14)/2; fibre 3: (30 … 34)/2; fibre 4: (40 … 43)/2.
    expect(Array.from(summary.fibreSignalToNoise)).toEqual([6.25, Number.NaN, 16, 20.75]);
    expect(summary.signalToNoise).toEqual({ faintest: 6.25, median: 16, brightest: 20.75 });
  });
});
