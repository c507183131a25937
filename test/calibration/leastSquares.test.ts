/** Closed forms of the straight line (Bevington & Robinson, Data Reduction and Error Analysis, eqs. 6.12 and 6.23). */
import { describe, expect, it } from "vitest";
import { NormalEquations } from "../../src/calibration/leastSquares.js";

const x = [0.5, 1.25, 3, 4.5, 7];
const y = [2.1, 2.9, 5.2, 6.4, 9.9];
const weight = [1, 4, 0.5, 2, 3];

function closedForm() {
  const sum = (value: (i: number) => number) => x.reduce((total, _, i) => total + weight[i] * value(i), 0);
  const [s, sx, sy] = [sum(() => 1), sum((i) => x[i]), sum((i) => y[i])];
  const [sxx, sxy] = [sum((i) => x[i] ** 2), sum((i) => x[i] * y[i])];
  const d = s * sxx - sx * sx;
  return { a: (sxx * sy - sx * sxy) / d, b: (s * sxy - sx * sy) / d, covariance: [sxx / d, -sx / d, -sx / d, s / d] };
}

describe("normal equations", () => {
  it("put a straight line through weighted points", () => {
    const normal = new NormalEquations(2);
    x.forEach((value, i) => {
      normal.add([0, 1], [1, value], 2, y[i], weight[i]);
    });
    const { a, b, covariance } = closedForm();
    const solution = normal.solve();
    expect(solution[0]).toBeCloseTo(a, 12);
    expect(solution[1]).toBeCloseTo(b, 12);
    Array.from(normal.inverse()).forEach((value, i) => {
      expect(value).toBeCloseTo(covariance[i], 12);
    });
  });

  it("take rows with few entries, and weigh prior knowledge against them", () => {
    const normal = new NormalEquations(3);
    normal.add([0, 2], [1, 2], 2, 5, 4);
    normal.add([2], [1], 1, 3, 1e6);
    normal.addPrior(1, -7, 2);
    normal.addPrior(2, 1, 1e6);
    const [p, q, r] = normal.solve();
    expect(r).toBeCloseTo(2, 6); // between 3 and 1, equally sure
    expect(p).toBeCloseTo(1, 5);
    expect(q).toBeCloseTo(-7, 12);
  });

  it("leave at 0 what nothing fixes", () => {
    const normal = new NormalEquations(2);
    normal.add([0], [2], 1, 6, 1);
    expect(Array.from(normal.solve())).toEqual([3, 0]);
    normal.clear();
    normal.add([1], [2], 1, 6, 1);
    expect(Array.from(normal.solve())).toEqual([0, 3]);
  });
});
