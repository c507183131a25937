/** Conservation laws and closed forms of sums of parts of pixels. */
import { describe, expect, it } from "vitest";
import { overlaps, type Reconstruction, rebinCovariance, rebinRow } from "../../src/calibration/overlaps.js";
import { openStream } from "../../src/random/streams.js";

const KINDS: Reconstruction[] = ["constant", "parabolic"];
const nx = 40;
const stream = openStream(5, "overlaps");
const random = (n: number, from = 0) => Float64Array.from({ length: n }, () => from + stream.uniform());
const all = new Uint8Array(nx).fill(1);
const sum = (values: ArrayLike<number>) => Array.from(values).reduce((a, b) => a + b, 0);

/** Edges at uneven places from the first pixel's outer edge to the last's. */
function uneven(n: number): Float64Array {
  const inner = random(n - 1)
    .map((u) => u * nx - 0.5)
    .sort();
  return Float64Array.from([-0.5, ...inner, nx - 0.5]);
}

describe.each(KINDS)("%s", (kind) => {
  it.each([7, 40, 133])("%d uneven bins hold all counts to 1e-12, rising and falling", (n) => {
    const edges = uneven(n);
    const flux = random(nx, 100);
    for (const positions of [edges, edges.slice().reverse()]) {
      const rows = overlaps(positions, all, kind, 0.1);
      expect(Math.abs(sum(rebinRow(rows, flux)) / sum(flux) - 1)).toBeLessThan(1e-12);
      expect(sum(rows.lost)).toBe(0);
    }
    const rising = rebinRow(overlaps(edges, all, kind, 0.1), flux);
    const falling = rebinRow(overlaps(edges.slice().reverse(), all, kind, 0.1), flux);
    falling.reverse().forEach((value, b) => {
      expect(value).toBeCloseTo(rising[b], 10);
    });
  });

  it("the whole covariance sums to the variance of all counts, those between columns too", () => {
    const rows = overlaps(uneven(61), all, kind, 0.1);
    const [variance, next] = [random(nx, 1), random(nx).map((u) => u - 0.5)];
    let total = sum(rebinCovariance(rows, rows, 0, variance, next));
    for (let d = 1; d < 61; d++) {
      const terms = rebinCovariance(rows, rows, d, variance, next);
      expect(terms.subarray(61 - d).every((value) => Number.isNaN(value))).toBe(true);
      total += 2 * sum(terms.subarray(0, 61 - d));
    }
    expect(total).toBeCloseTo(sum(variance) + 2 * sum(next.subarray(0, nx - 1)), 10);
  });

  it("each covariance is that of the weights as a matrix", () => {
    const rows = overlaps(uneven(23), all, kind, 0.1);
    const [variance, next] = [random(nx, 1), random(nx).map((u) => u - 0.5)];
    const unit = (j: number) => Float64Array.from({ length: nx }, (_, x) => (x === j ? 1 : 0));
    const matrix = Array.from({ length: nx }, (_, j) => rebinRow(rows, unit(j)));
    const between = (i: number, j: number) =>
      i === j ? variance[i] : Math.abs(i - j) === 1 ? next[Math.min(i, j)] : 0;
    for (const d of [0, 1, 3]) {
      rebinCovariance(rows, rows, d, variance, next).forEach((value, b) => {
        if (b + d >= 23) return;
        let expected = 0;
        for (let i = 0; i < nx; i++) {
          for (let j = 0; j < nx; j++) expected += matrix[i][b] * matrix[j][b + d] * between(i, j);
        }
        expect(value).toBeCloseTo(expected, 12);
      });
    }
  });

  it("a bin makes good for what is lost, up to the share that was set", () => {
    const usable = all.slice();
    usable[10] = 0;
    const flux = new Float64Array(nx).fill(50);
    flux[10] = Number.NaN;
    // Bins of four pixels: a quarter of one is lost; those at the ends reach a tenth of their width beyond.
    const positions = Float64Array.from({ length: 11 }, (_, b) => -0.9 + 4 * b);
    const lenient = rebinRow(overlaps(positions, usable, kind, 0.3), flux);
    expect([lenient[1], lenient[2], lenient[3]].map((value) => Math.round(1e9 * value) / 1e9)).toEqual([200, 200, 200]);
    expect(lenient[0]).toBeCloseTo(200, 9);
    const strict = overlaps(positions, usable, kind, 0.2);
    const found = rebinRow(strict, flux);
    expect(found[2]).toBeNaN();
    expect(strict.lost[2]).toBeCloseTo(0.25, 12);
    expect(strict.lost[0]).toBeCloseTo(0.1, 12);
    expect(found[1]).toBeCloseTo(200, 9);
    const covariance = rebinCovariance(strict, strict, 1, new Float64Array(nx).fill(1));
    expect([covariance[1], covariance[2]]).toEqual([Number.NaN, Number.NaN]);
  });
});

it("half a pixel aside each bin is half of two: variance 1/2, covariance with the next 1/4, none beyond", () => {
  const positions = Float64Array.from({ length: nx }, (_, b) => b);
  const rows = overlaps(positions, all, "constant", 0.1);
  const ones = new Float64Array(nx).fill(1);
  expect([...rebinCovariance(rows, rows, 0, ones)]).toEqual(new Array(nx - 1).fill(0.5));
  expect([...rebinCovariance(rows, rows, 1, ones).subarray(0, nx - 2)]).toEqual(new Array(nx - 2).fill(0.25));
  expect([...rebinCovariance(rows, rows, 2, ones).subarray(0, nx - 3)]).toEqual(new Array(nx - 3).fill(0));
});

it("parabolas hand on a quadratic exactly, constants do not", () => {
  // ∫ of 3 + 2x − 0.7x² + x³·0: its mean over a pixel is known, and over any bin.
  const integral = (x: number) => 3 * x + x * x - (0.7 * x ** 3) / 3;
  const flux = Float64Array.from({ length: nx }, (_, j) => integral(j + 0.5) - integral(j - 0.5));
  const positions = Float64Array.from({ length: 30 }, (_, b) => 1.1 + 1.23 * b);
  const error = (kind: Reconstruction) =>
    rebinRow(overlaps(positions, all, kind, 0.1), flux).map((value, b) =>
      Math.abs(value - integral(positions[b + 1]) + integral(positions[b])),
    );
  expect(Math.max(...error("parabolic"))).toBeLessThan(1e-9);
  expect(Math.max(...error("constant"))).toBeGreaterThan(1);
});
