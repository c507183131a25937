import { describe, expect, test } from "vitest";
import { openStream } from "../../src/random/streams.js";

const N = 200_000;

describe("streams of random numbers", () => {
  test("the same seed and name give the same numbers, any other name others", () => {
    const first = (...name: (string | number)[]) => {
      const stream = openStream(5, ...name);
      return [stream.uniform(), stream.uniform()];
    };
    expect(first("sci_01", "photons", 3)).toEqual(first("sci_01", "photons", 3));
    const heads = [
      first("sci_01", "photons", 3),
      first("sci_01", "photons", 4),
      first("sci_02", "photons", 3),
      first("sci_01", "read"),
    ];
    expect(new Set(heads.map(String)).size).toBe(4);
    expect(openStream(6, "a").uniform()).not.toBe(openStream(5, "a").uniform());
  });

  test("neighbouring streams are not correlated", () => {
    let product = 0;
    for (let row = 0; row < 20_000; row++) {
      product += (openStream(5, "row", row).uniform() - 0.5) * (openStream(5, "row", row + 1).uniform() - 0.5);
    }
    // Variance of the product of two centred uniforms: 1/144.
    expect(Math.abs(product) / Math.sqrt(20_000 / 144)).toBeLessThan(4.4);
  });

  test("uniforms fill [0, 1) evenly: χ² over 11 cells", () => {
    const stream = openStream(8, "uniform");
    const cells = new Float64Array(11);
    for (let i = 0; i < N; i++) cells[Math.floor(11 * stream.uniform())]++;
    const chiSquare = cells.reduce((total, n) => total + (n - N / 11) ** 2 / (N / 11), 0);
    // 0.1 % and 99.9 % points of χ² with 10 degrees of freedom: Abramowitz & Stegun, table 26.8 (1.48 from scipy).
    expect(chiSquare).toBeLessThan(29.588);
    expect(chiSquare).toBeGreaterThan(1.479);
  });

  test("normals have the moments 0, 1, 0, 3", () => {
    const stream = openStream(8, "normal");
    const moments = [0, 0, 0, 0];
    for (let i = 0; i < N; i++) {
      const z = stream.normal();
      for (let p = 0; p < 4; p++) moments[p] += z ** (p + 1) / N;
    }
    // E z^2p = (2p − 1)!! (Abramowitz & Stegun 26.2.16), so the variances of z, z², z³, z⁴ are 1, 2, 15, 96.
    const expected = [0, 1, 0, 3];
    const variance = [1, 2, 15, 96];
    for (let p = 0; p < 4; p++) {
      expect(Math.abs(moments[p] - expected[p]) / Math.sqrt(variance[p] / N)).toBeLessThan(4.4);
    }
  });

  test("successive normals are independent", () => {
    const stream = openStream(9, "normal");
    let product = 0;
    let before = stream.normal();
    for (let i = 0; i < N; i++) {
      const now = stream.normal();
      product += before * now;
      before = now;
    }
    expect(Math.abs(product) / Math.sqrt(N)).toBeLessThan(4.4);
  });
});
