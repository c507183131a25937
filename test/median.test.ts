import fc from "fast-check";
import { beforeAll, describe, expect, it } from "vitest";
import { quantileOfSorted } from "../src/detector/clip.js";
import { type Kernels, loadKernels } from "../src/kernels/module.js";
import { median, weightedMedian } from "../src/reference/median.js";

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

function inKernel(values: number[]): number {
  const bench = kernels.workbench(8 * values.length);
  const view = bench.float64(values.length);
  view.set(values);
  return bench.call.median(view.byteOffset, values.length);
}

describe("quantile", () => {
  it("is that of the sorted list, linear between its neighbours", () => {
    const list = fc.array(fc.integer({ min: -40, max: 40 }), { minLength: 1, maxLength: 60 });
    fc.assert(
      fc.property(list, fc.double({ min: 0, max: 1, noNaN: true }), (values, q) => {
        const bench = kernels.workbench(8 * values.length);
        const view = bench.float64(values.length);
        view.set(values);
        const own = bench.call.quantile(view.byteOffset, values.length, q);
        expect(Math.abs(own - quantileOfSorted(Float64Array.from(values).sort(), q))).toBeLessThan(1e-12);
      }),
    );
  });
});

describe("median", () => {
  it("is the middle value, or the mean of the middle two", () => {
    for (const of of [inKernel, median]) {
      expect(of([7])).toBe(7);
      expect(of([9, -4, 2])).toBe(2);
      expect(of([8, 1, 5, 2])).toBe(3.5);
      expect(of([3, 3, 3, 9, 3, 1])).toBe(3);
    }
  });

  it("agrees between kernel and reference on any list, ties and order included", () => {
    const list = fc.array(fc.oneof(fc.double({ noNaN: true, min: -1e9, max: 1e9 }), fc.integer({ min: -3, max: 3 })), {
      minLength: 1,
      maxLength: 70,
    });
    // −0 and 0 are equal to a comparison of sizes, so that either may come out.
    fc.assert(
      fc.property(list, (values) => {
        expect(inKernel(values) + 0).toBe(median(values) + 0);
      }),
    );
  });
});

it("a weighted median parts the weight in two", () => {
  expect(weightedMedian([5, 1, 9], [1, 1, 1])).toBe(5);
  expect(weightedMedian([5, 1, 9], [1, 1, 3])).toBe(9);
  expect(weightedMedian([5, 1, 9], [0, 4, 3])).toBe(1);
  expect(weightedMedian([], [])).toBeNaN();
});
