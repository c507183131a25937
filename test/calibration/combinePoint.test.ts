/** Means and rejections at one point, by hand. */
import { expect, test } from "vitest";
import { PointStack } from "../../src/calibration/combinePoint.js";

/** Frames of variance 4 unless told otherwise, whose weights go by it. */
function stackOf(
  values: number[],
  scales = values.map(() => 1),
  variances = values.map(() => 4),
  misfit = 0,
): PointStack {
  const point = new PointStack(20);
  values.forEach((value, i) => {
    point.frame[i] = i;
    point.value[i] = value;
    point.scale[i] = scales[i];
    point.variance[i] = variances[i];
    point.information[i] = variances[i];
    point.misfit[i] = misfit;
  });
  point.n = values.length;
  return point;
}

const kept = (point: PointStack) => Array.from(point.kept.subarray(0, point.n));

test("the mean weighs each frame by what it knows of the common light", () => {
  const point = stackOf([10, 44, 19], [1, 4, 2], [4, 9, 16]);
  point.reject(5);
  // Least squares of d = s·μ: Σ s d/v ÷ Σ s²/v, with variance 1 ÷ Σ s²/v.
  const information = 1 / 4 + 16 / 9 + 4 / 16;
  expect(point.mean).toBeCloseTo((10 / 4 + (4 * 44) / 9 + (2 * 19) / 16) / information, 12);
  expect(point.meanVariance).toBeCloseTo(1 / information, 12);
  expect(kept(point)).toEqual([1, 1, 1]);
  const mean = point.mean;
  const squares = (10 - mean) ** 2 / 4 + (44 - 4 * mean) ** 2 / 9 + (19 - 2 * mean) ** 2 / 16;
  expect(point.reducedChiSquare()).toBeCloseTo(squares / 2, 12);
});

test("of three frames one that is hit goes, however small the sample's scatter makes it look", () => {
  const point = stackOf([101, 99, 125]);
  point.reject(5);
  // Against the sample's own scatter, 14.5, it lies 1.15 σ from the mean.
  expect(kept(point)).toEqual([1, 1, 0]);
  expect([point.mean, point.meanVariance]).toEqual([100, 2]);
  const low = stackOf([101, 99, 75]);
  low.reject(5);
  expect(kept(low)).toEqual([1, 1, 0]);
});

test("the others' noise counts: what lies just within it stays, what lies just beyond goes", () => {
  // Against the mean of two others: σ² = 4 + 4/2, five of which are 12.25.
  const at = (off: number) => {
    const point = stackOf([100, 100, 100 + off]);
    point.reject(5);
    return kept(point)[2];
  };
  expect([at(12.2), at(12.3), at(-12.2), at(-12.3)]).toEqual([1, 0, 1, 0]);
});

test("of two that disagree the lower stays; where no majority agrees, the lowest and its like", () => {
  for (const [values, stay] of [
    [
      [10, 60],
      [1, 0],
    ],
    [
      [60, 10],
      [0, 1],
    ],
    [
      [10, 20],
      [1, 1],
    ],
    [
      [500, 10, 90],
      [0, 1, 0],
    ],
    [
      [500, 11, 10, 700],
      [0, 1, 1, 0],
    ],
    [
      [10, 12, 9, 11, 300, 310, 330],
      [1, 1, 1, 1, 0, 0, 0],
    ],
  ]) {
    const point = stackOf(values);
    point.reject(5);
    expect(kept(point), String(values)).toEqual(stay);
  }
});

test("two hits of unlike size both go: the second when the first no longer hides it", () => {
  const point = stackOf([100, 101, 99, 100, 98, 114, 5000]);
  point.reject(5);
  expect(kept(point)).toEqual([1, 1, 1, 1, 1, 0, 0]);
});

test("what frames may differ by beyond noise is granted, and without rejection all stay", () => {
  const point = stackOf([1000, 1010, 1060], [1, 1, 1], [4, 4, 4], 400);
  point.reject(5);
  expect(kept(point)).toEqual([1, 1, 1]);
  const all = stackOf([10, 12, 900]);
  all.reject(Number.POSITIVE_INFINITY);
  expect(kept(all)).toEqual([1, 1, 1]);
  const alone = stackOf([7]);
  alone.reject(5);
  expect([alone.mean, alone.meanVariance, alone.reducedChiSquare()]).toEqual([7, 4, Number.NaN]);
});
