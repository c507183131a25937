import { describe, expect, it } from "vitest";
import { clippedScatter, medianOf, quantileOfSorted } from "../../src/detector/clip.js";
import { overscanLevel } from "../../src/detector/overscan.js";
import { fitSmoothLevel } from "../../src/detector/smoothLevel.js";
import { judgeMissing, python } from "../judges.js";
import { normalDeviate } from "../scene.js";
import { amplifierOf, momentsOf, rawFrame, seeded } from "./rawFrames.js";

/** A level that drifts by several counts while the frame is read, neither symmetric nor a polynomial. */
const drift = (y: number) => 1040 + 3.1 * Math.sin(y / 37 + 0.4) + 0.004 * y + 1.7 * Math.cos(y / 11);

describe("robust numbers", () => {
  it("quantiles are linear between neighbours", () => {
    expect(quantileOfSorted([1, 2, 4, 8, 16], 0.3)).toBeCloseTo(2.4, 12);
    expect(medianOf([7, Number.NaN, 1, 3])).toBe(3);
    expect(medianOf([])).toBeNaN();
  });

  it("scatter is that of the Gaussian core, within its sampling error, among 3 % of wild samples", () => {
    const next = seeded(5);
    const n = 40000;
    const values = Float64Array.from({ length: n }, (_, i) =>
      i % 33 === 0 ? 900 * next() : 12 + 2.7 * normalDeviate(next),
    );
    const { mean, sigma } = clippedScatter(values);
    // Wild samples fall on 0…900, 900·(1/33)/900·22 of them inside ±4 σ: under 0.1 %, which widens σ by under 0.4 %.
    expect(Math.abs(mean - 12)).toBeLessThan(4 * (2.7 / Math.sqrt(n)) + 0.02);
    expect(Math.abs(sigma / 2.7 - 1)).toBeLessThan(4 / Math.sqrt(2 * n) + 0.004);
  });

  it.skipIf(judgeMissing("scipy"))("scatter of exact normal quantiles is 1 (scipy's norm.ppf)", () => {
    const n = 20000;
    const script = `
import json, numpy as np
from scipy.stats import norm
print(json.dumps(norm.ppf((np.arange(${n}) + 0.5) / ${n}).tolist()))`;
    // A grid of 20 000 lacks what lies beyond 4.06 σ; its second moment is low by some 5e-4, so σ by half of that.
    expect(Math.abs(clippedScatter(JSON.parse(python(script))).sigma - 1)).toBeLessThan(5e-4);
  });

  it("scatter of whole counts includes the converter's twelfth (σ² + 1/12, uniform rounding)", () => {
    const next = seeded(6);
    const n = 60000;
    const values = Float64Array.from({ length: n }, () => Math.round(20.3 + 1.3 * normalDeviate(next)));
    const expected = Math.sqrt(1.3 ** 2 + 1 / 12);
    expect(Math.abs(clippedScatter(values).sigma / expected - 1)).toBeLessThan(4 / Math.sqrt(2 * n));
  });
});

describe("smooth level", () => {
  it("follows a drift with pulls of 1 that its variance promises", () => {
    const next = seeded(11);
    const pulls: number[] = [];
    for (let run = 0; run < 60; run++) {
      const samples = Float64Array.from({ length: 400 }, (_, y) => drift(y) + 0.5 * normalDeviate(next));
      const { level, variance } = fitSmoothLevel(samples);
      for (let y = 3; y < 400; y += 17) pulls.push((level[y] - drift(y)) / Math.sqrt(variance[y]));
    }
    const { sigma, mean, n } = momentsOf(pulls);
    // Neighbouring pulls share coefficients: about one in four is independent. The misfit of the spline adds a little.
    expect(Math.abs(mean)).toBeLessThan(4 / Math.sqrt(n / 4));
    expect(sigma).toBeGreaterThan(1 - 4 / Math.sqrt(n / 2));
    expect(sigma).toBeLessThan(1.15);
  });

  it("takes one interval for a straight line, and few coefficients for noise alone", () => {
    const next = seeded(3);
    const line = fitSmoothLevel(
      Float64Array.from({ length: 300 }, (_, y) => 1000 + 0.02 * y + 0.4 * normalDeviate(next)),
    );
    expect(line.intervals).toBe(1);
    expect(line.sampleSigma / 0.4).toBeGreaterThan(0.8);
    expect(line.sampleSigma / 0.4).toBeLessThan(1.2);
  });

  it("bridges gaps, holds the ends and ignores wild samples", () => {
    const next = seeded(4);
    const samples = Float64Array.from({ length: 500 }, (_, y) => drift(y) + 0.3 * normalDeviate(next));
    samples.fill(Number.NaN, 0, 40);
    samples.fill(Number.NaN, 300, 306);
    for (const y of [77, 78, 210, 431]) samples[y] += 60;
    const { level, nClipped } = fitSmoothLevel(samples);
    expect(nClipped).toBe(4);
    expect(level[0]).toBe(level[40]);
    for (const y of [78, 210, 303, 431]) expect(Math.abs(level[y] - drift(y))).toBeLessThan(0.6);
  });

  it("is exact without noise, and NaN without samples", () => {
    const exact = fitSmoothLevel(Float64Array.from({ length: 50 }, () => 977.25));
    expect(Math.max(...exact.level.map((value) => Math.abs(value - 977.25)))).toBeLessThan(1e-9);
    expect(fitSmoothLevel(new Float64Array(50).fill(Number.NaN)).level[7]).toBeNaN();
  });

  it.skipIf(judgeMissing("scipy"))("agrees with scipy's least-squares spline, level and variance", () => {
    const next = seeded(8);
    const samples = Float64Array.from({ length: 240 }, (_, y) => drift(y) + 0.4 * normalDeviate(next));
    const { level, variance, intervals, sampleSigma } = fitSmoothLevel(samples);
    expect(intervals).toBeGreaterThan(3);
    const script = `
import sys, json, numpy as np
from scipy.interpolate import BSpline
from scipy.linalg import lstsq, inv
a = json.loads(sys.argv[1]); s = np.array(a['s']); k = a['k']; n = len(s)
t = np.arange(n) / (n - 1) * k
knots = np.concatenate([[0] * 3, np.arange(k + 1), [k] * 3]).astype(float)
B = BSpline.design_matrix(np.clip(t, 0, k), knots, 3).toarray()
c = lstsq(B, s)[0]
print(json.dumps({'level': (B @ c).tolist(), 'leverage': np.einsum('ij,jk,ik->i', B, inv(B.T @ B), B).tolist()}))`;
    const judged = JSON.parse(python(script, [JSON.stringify({ s: Array.from(samples), k: intervals })]));
    for (let y = 0; y < 240; y++) {
      expect(Math.abs(level[y] - judged.level[y])).toBeLessThan(1e-8);
      expect(Math.abs(variance[y] / sampleSigma ** 2 / judged.leverage[y] - 1)).toBeLessThan(1e-7);
    }
  });
});

describe("overscan", () => {
  /** 100 columns of data, then 24 of overscan whose first carry trailing charge. */
  const drifting = (seed: number, ny = 300, jitter = 0) => {
    const next = seeded(seed);
    const jumps = Float64Array.from({ length: ny }, () => jitter * normalDeviate(next));
    return rawFrame("raw.fits", 124, ny, {}, (x, y) => {
      const trailing = x === 100 ? 40 : x === 101 ? 6 : 0;
      return Math.round(drift(y) + jumps[y] + trailing + (x < 100 ? 5000 : 0) + 2.2 * normalDeviate(next));
    });
  };

  it("gives the drifting level and the read noise, the converter's twelfth included", () => {
    const level = overscanLevel(drifting(21), amplifierOf("[1:100,1:300]", ["[103:124,1:300]"]))!;
    const errors = level.level.map((value, y) => value - drift(y));
    const { mean, sigma } = momentsOf(errors);
    expect(Math.abs(mean)).toBeLessThan(4 * Math.sqrt((2.2 ** 2 + 1 / 12) / level.nPixel));
    expect(sigma).toBeLessThan(0.3);
    expect(level.nPixel).toBe(22 * 300);
    const expected = Math.sqrt(2.2 ** 2 + 1 / 12);
    expect(Math.abs(level.readNoiseAdu - expected)).toBeLessThan(4 * level.readNoiseErrorAdu);
    expect(level.readNoiseErrorAdu / expected).toBeCloseTo(1 / Math.sqrt(2 * 21 * 300), 3);
    expect(level.jitterVariance).toBe(0);
  });

  it("counts each line's mean as a freedom lost", () => {
    const level = overscanLevel(drifting(27, 3000), amplifierOf("[1:100,1:3000]", ["[115:124,1:3000]"]))!;
    // Ten pixels a line: without the lost freedom the read noise would be 5 % low, 17 of its errors.
    const expected = Math.sqrt(2.2 ** 2 + 1 / 12);
    expect(Math.abs(level.readNoiseAdu - expected)).toBeLessThan(4 * level.readNoiseErrorAdu);
    expect(level.readNoiseErrorAdu / expected).toBeLessThan(0.005);
  });

  it("goes wrong when trailing charge is not skipped, which is why it is", () => {
    const kept = overscanLevel(drifting(21), amplifierOf("[1:100,1:300]", ["[101:124,1:300]"]))!;
    const skipped = overscanLevel(drifting(21), amplifierOf("[1:100,1:300]", ["[103:124,1:300]"]))!;
    expect(medianOf(kept.level.map((value, y) => value - skipped.level[y]))).toBeGreaterThan(0.1);
  });

  it("uses strips on both sides, and rows across when it lies above", () => {
    const both = overscanLevel(drifting(22), amplifierOf("[21:100,1:300]", ["[105:124,1:300]", "[103:104,1:300]"]))!;
    expect(both.nPixel).toBe(22 * 300);
    const next = seeded(9);
    const above = rawFrame("raw.fits", 200, 60, {}, (x) => drift(x) + 1.1 * normalDeviate(next));
    const level = overscanLevel(above, amplifierOf("[1:200,1:40]", ["[1:200,41:60]"], { levelFor: "columns" }))!;
    expect(level.level.length).toBe(200);
    expect(momentsOf(level.level.map((value, x) => value - drift(x))).sigma).toBeLessThan(0.2);
  });

  it("survives cosmic rays, NaN rows and rows never read", () => {
    const raw = drifting(23);
    for (const at of [110 + 124 * 50, 111 + 124 * 50, 120 + 124 * 51]) raw.data[at] += 3000;
    for (let y = 200; y < 220; y++) raw.data.fill(Number.NaN, y * 124, (y + 1) * 124);
    for (let y = 280; y < 300; y++) raw.data.fill(978, y * 124, (y + 1) * 124);
    const level = overscanLevel(raw, amplifierOf("[1:100,1:300]", ["[103:124,1:300]"]))!;
    expect(level.coveredShare).toBeCloseTo(260 / 300, 12);
    expect(Math.abs(level.level[50] - drift(50))).toBeLessThan(0.6);
    expect(Math.abs(level.level[210] - drift(210))).toBeLessThan(1.2);
    expect(Math.abs(level.readNoiseAdu / Math.sqrt(2.2 ** 2 + 1 / 12) - 1)).toBeLessThan(0.04);
  });

  it("sees lines that jump and carries it as variance", () => {
    const level = overscanLevel(drifting(24, 600, 1.5), amplifierOf("[1:100,1:600]", ["[103:124,1:600]"]))!;
    expect(Math.abs(Math.sqrt(level.jitterVariance) / 1.5 - 1)).toBeLessThan(0.15);
    expect(Math.abs(level.readNoiseAdu / Math.sqrt(2.2 ** 2 + 1 / 12) - 1)).toBeLessThan(0.04);
  });

  it("is told apart from an overscan without any value", () => {
    const raw = rawFrame("raw.fits", 124, 80, {}, (x) => (x < 100 ? 900 : Number.NaN));
    expect(() => overscanLevel(raw, amplifierOf("[1:100,1:80]", ["[103:124,1:80]"]))).toThrow(
      "raw.fits: the overscan of amplifier 1 holds no value at all; correct its section or give bias_level in the spectrograph file.",
    );
  });
});
