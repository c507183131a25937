/** Census of an image: kernel against reference, and against numbers that can be counted by eye. */
import fc from "fast-check";
import { expect, test } from "vitest";
import { census as byKernel } from "../src/kernels/census.js";
import { loadKernels } from "../src/kernels/module.js";
import { census } from "../src/reference/census.js";

const kernels = await loadKernels();

function both(values: ArrayLike<number>) {
  const bench = kernels.workbench(4 * values.length + 256);
  const own = bench.float32(values.length);
  own.set(Array.from(values));
  return [byKernel(bench, own), census(Float32Array.from(values))];
}

test("any values: the same numbers", () => {
  const value = fc.oneof(fc.float(), fc.integer({ min: -9, max: 9 }), fc.constantFrom(Number.NaN, Infinity, -0, 0.5));
  fc.assert(
    fc.property(fc.array(value, { maxLength: 60 }), (values) => {
      const [kernel, reference] = both(values.map(Math.fround));
      // −0 and 0 are the same lowest level.
      expect({ ...kernel, lowest: kernel.lowest + 0, highest: kernel.highest + 0 }).toEqual({
        ...{ ...reference, lowest: reference.lowest + 0, highest: reference.highest + 0 },
      });
    }),
    { seed: 20250312, numRuns: 2000 },
  );
});

test("seven values, counted by eye, in vector and tail", () => {
  const expected = { nFinite: 5, nNegative: 2, nFraction: 2, lowest: -3.5, highest: 8 };
  for (const found of both([Number.NaN, 1, -2, 0.25, Infinity, -3.5, 8])) expect(found).toEqual(expected);
  for (const found of both([])) expect(found).toMatchObject({ nFinite: 0, lowest: Infinity, highest: -Infinity });
});
