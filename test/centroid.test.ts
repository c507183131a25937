import fc from "fast-check";
import { beforeAll, describe, expect, it } from "vitest";
import { Centroider } from "../src/kernels/centroid.js";
import { type Kernels, loadKernels } from "../src/kernels/module.js";
import { centroid } from "../src/reference/centroid.js";

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

/** Both twins on the same input; they do the same sums in the same order, so the bits must agree. */
function both(data: number[], good: number[], centre: number, halfWidth: number, background: number): number {
  const door = new Centroider(kernels, data.length);
  door.load(data, good);
  const measured = door.measure(centre, halfWidth, background);
  expect(measured).toBe(
    centroid(
      data.map((d, y) => (good[y] > 0 ? d : 0)),
      good,
      centre,
      halfWidth,
      background,
    ),
  );
  return measured;
}

describe("centroid", () => {
  it("weighs whole pixels by their light: (2·3 + 3·5 + 4·1) / 9 = 25/9", () => {
    expect(both([9, 0, 3, 5, 1, 0, 7], [1, 1, 1, 1, 1, 1, 1], 3, 1.5, 0)).toBeCloseTo(25 / 9, 14);
  });

  it("takes the background off first: (3·4 + 4·0 + 2·2) / 6 = 16/6", () => {
    expect(both([9, 1, 3, 5, 1, 1, 7], [1, 1, 1, 1, 1, 1, 1], 3, 1.5, 1)).toBeCloseTo(16 / 6, 14);
  });

  it("counts the part of an edge pixel inside the window, at that part's middle", () => {
    // Window [1.7, 3.9]: pixel 2 from 1.7 (0.8 at 2.1), pixel 3 whole, pixel 4 to 3.9 (0.4 at 3.7); light 10, 20, 40.
    const expected = (0.8 * 10 * 2.1 + 20 * 3 + 0.4 * 40 * 3.7) / (0.8 * 10 + 20 + 0.4 * 40);
    expect(both([0, 0, 10, 20, 40, 90], [1, 1, 1, 1, 1, 1], 2.8, 1.1, 0)).toBeCloseTo(expected, 13);
  });

  it("leaves masked pixels out, NaN or not", () => {
    expect(both([0, Number.NaN, 3, 5, 1, 0], [1, 0, 1, 1, 0, 1], 2, 2.5, 0)).toBeCloseTo((2 * 3 + 3 * 5) / 8, 14);
  });

  it("is NaN where no light is", () => {
    expect(both([1, 2, 3, 2], [1, 1, 1, 1], 1.5, 1, 5)).toBeNaN();
    expect(both([1, 2, 3, 2], [1, 1, 1, 1], 12, 1, 0)).toBeNaN();
  });

  it("agrees between kernel and reference on any column", () => {
    const column = fc.array(fc.tuple(fc.double({ min: -50, max: 1e5, noNaN: true }), fc.constantFrom(0, 1, 1)), {
      minLength: 1,
      maxLength: 30,
    });
    const place = fc.double({ min: -5, max: 35, noNaN: true });
    fc.assert(
      fc.property(column, place, fc.double({ min: 0.01, max: 9, noNaN: true }), (pixels, centre, halfWidth) => {
        const data = pixels.map(([d]) => d);
        both(
          data,
          pixels.map(([, g]) => g),
          centre,
          halfWidth,
          3.5,
        );
      }),
    );
  });

  it("refuses marks of another length and an empty window", () => {
    const door = new Centroider(kernels, 4);
    expect(() => door.load([1, 2, 3], [1, 1])).toThrow("3 pixels and 2 marks; at most 4 of each, and equally many.");
    door.load([1, 2, 3], [1, 1, 1]);
    expect(() => door.measure(1, 0, 0)).toThrow("Window of 0 px about 1");
  });
});
