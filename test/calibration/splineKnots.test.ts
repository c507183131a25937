/** Curves of known form with known noise. */
import { describe, expect, it } from "vitest";
import { splineCovariances, splineValues } from "../../src/calibration/bspline.js";
import { fitAdaptedSpline } from "../../src/calibration/splineKnots.js";
import { openStream } from "../../src/random/streams.js";

const finest = Float64Array.from({ length: 513 }, (_, i) => i * 0.7);
const dice = openStream(11, "knots");
const x = Float64Array.from({ length: 4000 }, () => 358 * dice.uniform()).sort();
const line = (at: number, height: number) => (u: number) => height * Math.exp(-0.5 * ((u - at) / 0.95) ** 2);
const sigma = 8;
const noisy = (curve: (u: number) => number) => x.map((u) => curve(u) + sigma * dice.normal());
const weight = new Float64Array(x.length).fill(1 / sigma ** 2);

describe("knots where the samples ask for them", () => {
  it("are few without lines: noise averages out", () => {
    const fit = fitAdaptedSpline({ x, y: noisy((u) => 100 + 0.1 * u), weight }, finest, 5);
    expect(fit.nCell).toBeLessThan(24);
    const variances = splineCovariances(fit, x, x);
    expect(Math.sqrt(variances[2000])).toBeLessThan(sigma / 9);
  });

  it("are close at lines, bright and faint, which keep their height", () => {
    const [bright, faint] = [line(100.3, 3000), line(250.6, 25)];
    const curve = (u: number) => 100 + bright(u) + faint(u);
    const fit = fitAdaptedSpline({ x, y: noisy(curve), weight }, finest, 5);
    expect(fit.nCell).toBeLessThan(120);
    const narrowest = (at: number) =>
      Math.min(...Array.from(fit.knots.subarray(1), (k, i) => (Math.abs(k - at) < 1.5 ? k - fit.knots[i] : 99)));
    expect(narrowest(100.3)).toBeCloseTo(0.7, 9);
    expect(narrowest(250.6)).toBeLessThan(2.9);
    const at = Float64Array.from({ length: 60 }, (_, i) => 90 + i * 0.33);
    const pulls = splineValues(fit, at).map(
      (v, i) => (v - curve(at[i])) / Math.sqrt(splineCovariances(fit, at, at)[i]),
    );
    expect(Math.sqrt(pulls.reduce((s, p) => s + p * p, 0) / pulls.length)).toBeLessThan(1.5);
    expect(splineValues(fit, [250.6])[0]).toBeGreaterThan(115);
  });

  it("do not follow a wild sample", () => {
    const y = noisy(() => 100);
    const clean = fitAdaptedSpline({ x, y, weight }, finest, 5);
    const hit = y.slice();
    for (const i of [700, 1900, 1901, 3000]) hit[i] += 2000;
    const fit = fitAdaptedSpline({ x, y: hit, weight }, finest, 5);
    const off = splineValues(fit, x).map((v, i) => v - splineValues(clean, [x[i]])[0]);
    expect(Math.max(...off.map(Math.abs))).toBeLessThan(sigma / 4);
    expect(fit.nCell).toBeLessThan(clean.nCell + 12);
  });

  it("leave out what no sample fixes", () => {
    const gap = weight.map((w, i) => (x[i] > 150 && x[i] < 200 ? 0 : w));
    const fit = fitAdaptedSpline({ x, y: noisy(line(100, 1000)), weight: gap }, finest, 5);
    expect(fit.coef.every(Number.isFinite)).toBe(true);
  });
});
