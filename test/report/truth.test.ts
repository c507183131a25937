/** Scores against truth, on numbers made up so that the right score is known. */
import { describe, expect, test } from "vitest";
import { Flag } from "../../src/extraction/spectra.js";
import {
  commonScale,
  scoreByDecade,
  scoreCosmicRays,
  scoreLeak,
  scorePeaks,
  scoreTrace,
} from "../../src/report/truth.js";
import { normalDeviate, seeded } from "../scene.js";

/** Spectra [nFibre × nx] whose flux is the truth plus `error` σ plus `excess`. */
function made(
  nFibre: number,
  nx: number,
  truth: (k: number, x: number) => number,
  error: (k: number, x: number) => number,
  sigma = 3,
) {
  const each = (value: (k: number, x: number) => number) =>
    Float64Array.from({ length: nFibre * nx }, (_, i) => value(Math.floor(i / nx), i % nx));
  const flux = each(truth);
  return {
    spectra: {
      ...{ nFibre, nx },
      flux: each((k, x) => truth(k, x) + sigma * error(k, x)),
      variance: new Float64Array(nFibre * nx).fill(sigma * sigma),
      flags: new Int32Array(nFibre * nx),
    },
    truth: { flux, lit: new Array<boolean>(nFibre).fill(true) },
  };
}

describe("scores by decade of true flux", () => {
  const next = seeded(5);
  const levels = [20, 400, 7000];
  const { spectra, truth } = made(
    3,
    4000,
    (k) => levels[k],
    () => normalDeviate(next),
  );

  test("are 1 for true error bars, and the reciprocal of a wrong one", () => {
    // A robust standard deviation of 4000 points is good to 1.17/√4000 = 1.8 %; four of that.
    for (const [factor, pull] of [
      [1, 1],
      [0.25, 2],
    ]) {
      const scored = scoreByDecade({ ...spectra, variance: spectra.variance.map((v) => v * factor) }, truth);
      expect(scored.map(({ from, to, nPoint }) => [from, to, nPoint])).toEqual([
        [10, 100, 4000],
        [100, 1000, 4000],
        [1000, 10000, 4000],
      ]);
      for (const score of scored) expect(Math.abs(score.pull / pull - 1)).toBeLessThan(0.075);
    }
  });

  test("show a common offset as bias and in the pull, which a scatter about the median would hide", () => {
    const lifted = { ...spectra, flux: spectra.flux.map((f) => f + 30) };
    const [faint, middle] = scoreByDecade(lifted, truth);
    expect(Math.abs(faint.bias - 1.5)).toBeLessThan(0.02);
    expect(Math.abs(middle.bias - 30 / 400)).toBeLessThan(0.001);
    // 1.4826 × median |10 + normal deviate|
    expect(Math.abs(faint.pull - 14.83)).toBeLessThan(0.15);
    expect(faint.beyond5Sigma).toBe(1);
  });

  test("count the points that were given up", () => {
    const flags = spectra.flags.slice().fill(Flag.weightLost, 0, 1000);
    const flux = spectra.flux.slice().fill(Number.NaN, 4000, 4500);
    flags.fill(Flag.cosmicRay, 8000, 9000); // informative: the value stands
    const scored = scoreByDecade({ ...spectra, flags, flux }, truth);
    expect(scored.map(({ usableShare }) => usableShare)).toEqual([0.75, 0.875, 1]);
  });

  test("leave unlit fibres out", () => {
    const scored = scoreByDecade(spectra, { ...truth, lit: [true, false, true] });
    expect(scored.map(({ from }) => from)).toEqual([10, 1000]);
  });
});

describe("leak", () => {
  const levels = [5, 2e4, 90, 3e4, 40];
  const shares = [0.003, 0, -0.004, 0, 0.01];
  const brighter = [2e4, 0, 3e4, 0, 3e4];
  const { spectra, truth } = made(
    5,
    50,
    (k) => levels[k],
    (k) => (shares[k] * brighter[k]) / 3,
  );

  test("is the share of the brighter neighbour's light found in excess", () => {
    const leak = scoreLeak(spectra, truth, 100);
    expect(leak).toMatchObject({ contrast: 100, nFibre: 3, nPoint: 150, worstFibre: 5 });
    expect(leak.meanShare).toBeCloseTo((0.003 - 0.004 + 0.01) / 3, 12);
    expect(leak.worstShare).toBeCloseTo(0.01, 12);
  });

  test("needs a neighbour so bright, and enough columns", () => {
    // 30000/90 is below 400; the others are above.
    expect(scoreLeak(spectra, truth, 400).nFibre).toBe(2);
    expect(scoreLeak(spectra, truth, 1e5)).toMatchObject({ nFibre: 0, meanShare: Number.NaN, worstFibre: 0 });
    const flags = spectra.flags.slice().fill(Flag.saturated, 4 * 50, 4 * 50 + 31);
    expect(scoreLeak({ ...spectra, flags }, truth, 100)).toMatchObject({ nFibre: 2, worstFibre: 3 });
  });
});

describe("cosmic rays", () => {
  const nx = 40;
  const ny = 30;
  const { spectra, truth } = made(
    1,
    nx,
    () => 100,
    () => 0,
  );
  const scene = (hits: [x: number, y: number, electrons: number][]) => {
    const cosmicRays = new Float64Array(nx * ny);
    for (const [x, y, electrons] of hits) cosmicRays[y * nx + x] = electrons;
    return { ...truth, ny, cosmicRays, trace: new Float64Array(nx).fill(14.4), readNoise: 2 };
  };

  test("are hits when the truth says so, found when flagged, spoilt when neither flagged nor right", () => {
    const flags = spectra.flags.slice();
    const flux = spectra.flux.slice();
    flags[5] = Flag.cosmicRay;
    flags[12] = Flag.weightLost;
    flux[20] += 900;
    // 5 √(100 + 5·2²) = 54.8 e⁻ is the bound: 50 is no hit; nor is light three rows off.
    const hits = scene([
      ...([5, 12, 20, 30] as const).map((x): [number, number, number] => [x, 15, 1000]),
      [35, 14, 50],
      [37, 18, 1000],
    ]);
    const score = scoreCosmicRays({ ...spectra, flags, flux }, hits);
    expect(score).toMatchObject({ nHit: 4, foundShare: 0.5, spoiltShare: 0.25 });
  });

  test("are flagged falsely where none came near", () => {
    const flags = spectra.flags.slice();
    flags[10] = Flag.cosmicRay; // next to a hit: rejection grows
    flags[25] = Flag.cosmicRay;
    const score = scoreCosmicRays({ ...spectra, flags }, scene([[11, 14, 700]]));
    // Columns 10, 11 and 12 are not clean.
    expect(score.nClean).toBe(nx - 3);
    expect(score.falseShare).toBe(1 / (nx - 3));
  });
});

describe("the common scale", () => {
  test("is told by bright points alone, unusable ones left out", () => {
    const { spectra, truth } = made(
      4,
      40,
      (k) => [300, 400, 4000, 50000][k],
      () => 0,
    );
    // The 80 faint points are off by a tenth; 19 of the 80 bright ones are spoilt and flagged.
    const flux = spectra.flux.map((f, i) => (i < 80 ? 1.1 * f : i < 99 ? 3 * f : 0.993 * f));
    const flags = spectra.flags.map((_, i) => (i >= 80 && i < 99 ? Flag.weightLost : 0));
    expect(commonScale({ ...spectra, flux, flags }, truth)).toBeCloseTo(0.993, 12);
    expect(commonScale({ ...spectra, flux, flags }, truth, 100)).toBeCloseTo(1.1, 12);
    expect(commonScale({ ...spectra, flux }, truth, 1e4)).toBeCloseTo(0.993, 12);
  });
});

describe("peaks of lines", () => {
  const [nx, ny] = [80, 30];
  const line = (x: number, at: number, height: number) => height * Math.exp(-0.5 * (x - at) ** 2);
  // Sharp lines at 10, 30 and 50, a fainter one at 62; at 72 a slow bump, which is none.
  const { spectra, truth } = made(
    1,
    nx,
    (_, x) =>
      500 +
      line(x, 10, 2e4) +
      line(x, 30, 3e4) +
      line(x, 50, 4e4) +
      line(x, 62, 8e3) +
      2e4 * Math.exp(-0.002 * (x - 72) ** 2),
    () => 0,
    30,
  );
  const known = {
    ...truth,
    ny,
    cosmicRays: new Float64Array(nx * ny),
    trace: new Float64Array(nx).fill(14.4),
    readNoise: 2,
  };

  test("are sharp, bright, and not hit by a cosmic ray", () => {
    expect(scorePeaks(spectra, known, 1.5e4)).toEqual({ nPeak: 3, ratio: 1, flaggedShare: 0, clippedShare: 0 });
    expect(scorePeaks(spectra, known, 3.2e4).nPeak).toBe(1);
    const cosmicRays = known.cosmicRays.slice();
    cosmicRays[20 * nx + 31] = 500; // one column and six rows off
    expect(scorePeaks(spectra, { ...known, cosmicRays }, 1.5e4).nPeak).toBe(2);
  });

  test("are clipped when a fifth is gone beyond 5 σ or no value is left, flagged when flagged", () => {
    const [flux, flags] = [spectra.flux.slice(), spectra.flags.slice()];
    flux[10] *= 0.75; // a quarter of 2e4 e⁻ at σ = 30
    flags[10] = Flag.cosmicRay;
    flux[30] *= 0.85; // many σ, but under a fifth
    flags[50] = Flag.weightLost;
    const score = scorePeaks({ ...spectra, flux, flags }, known, 1.5e4);
    expect(score).toMatchObject({ nPeak: 3, flaggedShare: 2 / 3, clippedShare: 1 - 1 / 3 });
    expect(score.ratio).toBeCloseTo(0.8, 12); // of 0.75 and 0.85
    const noisy = { ...spectra, flux, variance: spectra.variance.map(() => 2000 ** 2) };
    expect(scorePeaks(noisy, known, 1.5e4)).toMatchObject({ flaggedShare: 0, clippedShare: 0 });
  });
});

describe("tramlines", () => {
  const nx = 60;
  const lit = [true, false, true, true];
  const truth = Float64Array.from({ length: 4 * nx }, (_, i) => 10 + 5 * Math.floor(i / nx) + 0.01 * (i % nx));

  test("are judged about the offset that all share", () => {
    const wiggle = [0.01, 9, 0.02, 0.01];
    const y = truth.map((value, i) => value - 0.13 + wiggle[Math.floor(i / nx)] * (i % 2 ? 1 : -1));
    const score = scoreTrace(y, truth, lit, 5);
    // The median of values at ±0.01 and ±0.02 in equal numbers lies between −0.01 and 0.01.
    expect(score.offset).toBeCloseTo(-0.13, 10);
    expect(score.rms).toBeCloseTo(Math.sqrt((0.01 ** 2 + 0.02 ** 2 + 0.01 ** 2) / 3), 10);
    expect(score).toMatchObject({ worstFibre: 3, nMisnamed: 0 });
    expect(score.worstRms).toBeCloseTo(0.02, 10);
  });

  test("tell a fibre that runs along its neighbour", () => {
    const y = truth.map((value, i) => value + (Math.floor(i / nx) === 3 ? 5 : 0));
    expect(scoreTrace(y, truth, lit, 5)).toMatchObject({ nMisnamed: 1, worstFibre: 4, offset: 0 });
  });
});
