/** The Cramér–Rao bound against closed forms, and against a dense inverse by another program. */
import { describe, expect, test } from "vitest";
import { leastVariances, varianceOverBound } from "../../src/report/bound.js";
import { judgeMissing, python } from "../judges.js";

describe("least variances", () => {
  test("of a fibre alone are 1 / Σ P²/v (Horne 1986, PASP 98, 609, eq. 9)", () => {
    const profile = Float64Array.of(0.1, 0.5, 0.3, 0.1);
    const variance = Float64Array.of(4, 9, 7, Number.POSITIVE_INFINITY);
    const expected = 1 / (0.01 / 4 + 0.25 / 9 + 0.09 / 7);
    expect(leastVariances(profile, variance)[0]).toBeCloseTo(expected, 12);
  });

  test("of two fibres grow by 1 / (1 − ρ²), ρ the correlation of their weighted profiles", () => {
    const [p, q, v] = [
      [0.6, 0.3, 0.1],
      [0.05, 0.35, 0.6],
      [2, 5, 3],
    ];
    const product = (a: number[], b: number[]) => a.reduce((sum, one, i) => sum + (one * b[i]) / v[i], 0);
    const growth = 1 / (1 - product(p, q) ** 2 / (product(p, p) * product(q, q)));
    const [first, second] = leastVariances(Float64Array.from([...p, ...q]), Float64Array.from(v));
    expect(first).toBeCloseTo(growth / product(p, p), 12);
    expect(second).toBeCloseTo(growth / product(q, q), 12);
  });

  test.skipIf(judgeMissing("scipy"))("of seven fibres are those of a dense inverse", () => {
    const [nFibre, ny] = [7, 19];
    const profiles = Float64Array.from({ length: nFibre * ny }, (_, i) => {
      const [k, y] = [Math.floor(i / ny), i % ny];
      return 1 / (1 + (y - 1.7 - 2.3 * k) ** 2 + 0.1 * k);
    });
    const variance = Float64Array.from({ length: ny }, (_, y) => 3 + ((7 * y) % 5) + 0.2 * y);
    const script = `import json,sys,numpy as np
a,v=json.load(sys.stdin); a=np.array(a).reshape(${nFibre},${ny})
print(json.dumps(list(np.diag(np.linalg.inv((a/np.array(v))@a.T)))))`;
    const expected: number[] = JSON.parse(python(script, [], JSON.stringify([[...profiles], [...variance]])));
    const found = leastVariances(profiles, variance);
    expected.forEach((value, i) => {
      expect(Math.abs(found[i] / value - 1)).toBeLessThan(1e-11);
    });
  });

  test("want whole profiles", () => {
    expect(() => leastVariances(new Float64Array(10), new Float64Array(4))).toThrow(
      "10 weights do not make whole profiles of 4 pixels; give nFibre × ny.",
    );
  });
});

test("variances are compared with the bound where there is one and no flag", () => {
  const spectra = { nFibre: 3, nx: 4, variance: new Float64Array(12).fill(9), flags: new Int32Array(12) };
  const bounds = [Float64Array.of(9, 8, Number.NaN), Float64Array.of(6, 3, 7.5)];
  // Columns 1 and 3: 9/9, 9/8, none; 9/6, 9/3, 9/7.5 → the middle of 1, 1.125, 1.2, 1.5, 3.
  expect(varianceOverBound(spectra, [1, 3], bounds)).toBe(1.2);
  spectra.flags[4 + 3] = 1;
  // Without the 3: between 1.125 and 1.2.
  expect(varianceOverBound(spectra, [1, 3], bounds)).toBeCloseTo(1.1625, 12);
});
