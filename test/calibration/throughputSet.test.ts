import { describe, expect, it } from "vitest";
import type { Throughput } from "../../src/calibration/throughput.js";
import { combineThroughputs, levelScatter, withLevels } from "../../src/calibration/throughputSet.js";

const nx = 5;
/** Fibre k, column x. */
const made = (value: (k: number, x: number) => number, variance: (k: number) => number): Throughput => {
  const each = (of: (k: number, x: number) => number) =>
    Float32Array.from({ length: 3 * nx }, (_, i) => of(Math.floor(i / nx), i % nx));
  return { nFibre: 3, nx, relative: each(value), variance: each((k) => variance(k)), geometryDigest: "d" };
};
const dead = (k: number, value: number) => (k === 1 ? Number.NaN : value);

describe("several throughputs", () => {
  it("are combined by inverse variance; what one does not know the other tells", () => {
    const a = made(
      (k) => dead(k, 1 + 0.1 * k),
      (k) => dead(k, 1e-4),
    );
    const b = made(
      (k) => 1.06 + 0.1 * k,
      () => 3e-4,
    );
    const { relative, variance } = combineThroughputs([a, b]);
    expect(relative[0]).toBeCloseTo((1 / 1 + 1.06 / 3) / (1 + 1 / 3), 6);
    expect(variance[0]).toBeCloseTo(0.75e-4, 9);
    expect(relative[nx]).toBeCloseTo(1.16, 6);
  });

  it("differ by the scatter of their levels", () => {
    const a = made(
      (k) => 1 + 0.01 * (k - 1),
      () => 1e-6,
    );
    const b = made(
      () => 1,
      () => 1e-6,
    );
    expect(levelScatter(a, b)).toBeCloseTo(1.4826 * 0.01, 5);
  });

  it("give the shape of one and the levels of the other", () => {
    const shape = made(
      (k, x) => dead(k, 1 + 0.02 * (x - 2) + 0.1 * k),
      (k) => dead(k, 1e-6),
    );
    const levels = made(
      (k, x) => dead(k, 1.1 * (1 + 0.02 * (x - 2) + 0.1 * k) + 0.001 * (x - 2)),
      (k) => dead(k, 4e-6),
    );
    const { relative, variance } = withLevels(shape, levels);
    for (let x = 0; x < nx; x++) {
      expect(relative[x] / relative[2]).toBeCloseTo(1 + 0.02 * (x - 2), 6);
      expect(relative[x] / (1 + 0.02 * (x - 2))).toBeCloseTo(1.1, 3);
    }
    expect(relative[nx]).toBeNaN();
    // The shape's own, stretched, and a quarter of the levels' mean variance.
    expect(variance[2]).toBeCloseTo(1.21e-6 + 1e-6, 7);
  });
});
