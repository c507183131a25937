/** Counts to electrons: kernel against reference, to the bit, and both against the equation gain · (ADU − zero level). */
import fc from "fast-check";
import { beforeAll, describe, expect, test } from "vitest";
import * as byKernel from "../src/kernels/electrons.js";
import { type Kernels, loadKernels } from "../src/kernels/module.js";
import { MaskBit } from "../src/reference/bits.js";
import type { AmplifierCounts, ZeroLevel } from "../src/reference/electrons.js";
import * as byReference from "../src/reference/electrons.js";

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

const count = fc.oneof(
  { weight: 8, arbitrary: fc.integer({ min: 1, max: 1200 }) },
  fc.constantFrom(0, Number.NaN, Infinity, -Infinity, -3, 1000.25),
);
const parts = fc
  .record({
    nx: fc.integer({ min: 1, max: 19 }),
    ny: fc.integer({ min: 1, max: 24 }),
    edge: fc.integer({ min: 0, max: 3 }),
  })
  .chain(({ nx, ny, edge }) =>
    fc.record({
      nx: fc.constant(nx),
      ny: fc.constant(ny),
      stride: fc.constant(nx + edge),
      outStride: fc.constant(nx + 2 * edge),
      counts: fc.array(count, { minLength: (nx + edge) * ny + 5, maxLength: (nx + edge) * ny + 5 }),
      zero: fc.array(fc.double({ min: -50, max: 1100, noNaN: true }), { minLength: 24, maxLength: 24 }),
      zeroForRow: fc.boolean(),
      zeroIsMissing: fc.boolean(),
      gain: fc.constantFrom(1, 1.3, 0.71),
      limit: fc.constantFrom(900, 999.9999999, Infinity),
    }),
  );

/** The same job for the reference and for the kernel, which differ in where the images lie. */
function jobs(given: { nx: number; ny: number; stride: number; outStride: number; counts: number[]; limit: number }) {
  const { nx, ny, stride, outStride, counts, limit } = given;
  const nOut = outStride * ny + 3;
  const bench = kernels.workbench(4 * counts.length + 5 * nOut + 4096);
  const shared = { stride, from: 5, nx, ny, limit, outStride, to: 3 };
  const plain: AmplifierCounts = {
    ...{ ...shared, data: Float32Array.from(counts) },
    ...{ electrons: new Float32Array(nOut).fill(-7), mask: new Uint8Array(nOut).fill(64) },
  };
  const kernel: AmplifierCounts = {
    ...{ ...shared, data: bench.float32(counts.length), electrons: bench.float32(nOut), mask: bench.uint8(nOut) },
  };
  kernel.data.set(plain.data);
  kernel.electrons.set(plain.electrons);
  kernel.mask.set(plain.mask);
  return { bench, plain, kernel };
}

describe("kernel against reference", () => {
  test("any counts, any section of any image: the same bits, and nothing written beside them", () => {
    fc.assert(
      fc.property(parts, (given) => {
        const { bench, plain, kernel } = jobs(given);
        const { zeroForRow, zeroIsMissing, gain } = given;
        const level: ZeroLevel = { zero: Float64Array.from(given.zero), zeroForRow, zeroIsMissing, gain };
        expect(byKernel.electrons(bench, kernel, level)).toEqual(byReference.electrons(plain, level));
        expect([...kernel.electrons]).toEqual([...plain.electrons]);
        expect([...kernel.mask]).toEqual([...plain.mask]);
        const growth = { bleed: 3, growShort: 1, growBleed: 2 };
        byKernel.growSaturation(bench, kernel, growth);
        byReference.growSaturation(plain, growth);
        expect([...kernel.mask]).toEqual([...plain.mask]);
      }),
      { seed: 20250311, numRuns: 1500 },
    );
  });

  test("pictures are turned about their diagonal, whatever their shape", () => {
    for (const [nx, ny] of [
      [70, 33],
      [1, 5],
      [32, 64],
    ]) {
      const bench = kernels.workbench(10 * nx * ny + 1024);
      const image = bench.float32(nx * ny).map((_, i) => i);
      const own = bench.float32(nx * ny);
      own.set(image);
      const bytes = bench.uint8(nx * ny);
      bytes.set(Uint8Array.from(image));
      const [turned, turnedBytes] = [bench.float32(nx * ny), bench.uint8(nx * ny)];
      byKernel.turn(bench, own, nx, ny, turned);
      byKernel.turn(bench, bytes, nx, ny, turnedBytes);
      const expected = new Float32Array(nx * ny);
      byReference.turn(image, nx, ny, expected);
      expect(turned).toEqual(expected);
      expect(turnedBytes).toEqual(Uint8Array.from(expected));
      expect(expected[Math.min(1, nx - 1) * ny]).toBe(Math.min(1, nx - 1));
    }
  });
});

describe("both against the equation", () => {
  test("5 counts of an amplifier with a level for every column, one saturated, one not a number", () => {
    const given = {
      nx: 5,
      ny: 1,
      stride: 5,
      outStride: 5,
      limit: 900,
      counts: [0, 0, 0, 0, 0, 110, 232, Number.NaN, 950, 0],
    };
    const level = { zero: Float64Array.of(100, 200, 300, 400, 500), zeroForRow: false, zeroIsMissing: true, gain: 1.5 };
    const { bench, plain, kernel } = jobs(given);
    for (const [part, odd] of [
      [plain, byReference.electrons(plain, level)],
      [kernel, byKernel.electrons(bench, kernel, level)],
    ] as const) {
      expect([...part.electrons.subarray(3)]).toEqual([15, 48, Number.NaN, 825, Number.NaN]);
      expect([...part.mask.subarray(3)]).toEqual([0, 0, MaskBit.missing, MaskBit.saturated, MaskBit.missing]);
      expect(odd).toEqual({ nSaturated: 1, nWithoutValue: 1, nZero: 1 });
    }
  });

  test("refuses images that lie outside of the kernels' memory", () => {
    const { bench, plain } = jobs({ nx: 1, ny: 1, stride: 1, outStride: 1, limit: 9, counts: [1, 1, 1, 1, 1, 1] });
    const level = { zero: Float64Array.of(0), zeroForRow: true, zeroIsMissing: false, gain: 1 };
    expect(() => byKernel.electrons(bench, plain, level)).toThrow("outside of the kernels' memory");
  });
});
