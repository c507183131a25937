/** Against scipy.interpolate (BSpline, make_lsq_spline), and numpy for the covariance. */
import { describe, expect, it } from "vitest";
import {
  addNormal,
  addSamples,
  cellWidths,
  clampedKnots,
  emptyNormal,
  fitSpline,
  solveNormal,
  splineBases,
  splineBasis,
  splineCovariances,
  splineValues,
} from "../../src/calibration/bspline.js";
import { openStream } from "../../src/random/streams.js";
import { judgeMissing, python } from "../judges.js";

const breaks = [1, 1.5, 1.75, 3, 4.5, 4.75, 7, 9, 10.5, 11, 13, 14.25];
const knots = clampedKnots(breaks);
const dice = openStream(5, "spline");
const x = Float64Array.from({ length: 90 }, () => 1 + 13.25 * dice.uniform()).sort();
const y = x.map((u) => Math.sin(u) + 0.2 * dice.normal());
const weight = x.map(() => 0.2 + dice.uniform());

const SCRIPT = `
import sys, json, numpy as np
from scipy.interpolate import BSpline, make_lsq_spline
d = json.load(sys.stdin)
t, x, y, w = (np.array(d[k]) for k in "txyw")
s = make_lsq_spline(x, y, t, k=3, w=np.sqrt(w))
A = BSpline.design_matrix(x, t, 3).toarray()
C = np.linalg.inv(A.T @ (w[:, None] * A))
at = np.array(d["at"]); B = BSpline.design_matrix(at, t, 3).toarray()
print(json.dumps({"coef": s.c.tolist(), "values": s(at).tolist(), "C": C.tolist(), "basis": B.tolist(), "S": (B @ C @ B.T).tolist()}))
`;

describe.skipIf(judgeMissing("scipy"))("a cubic spline on uneven knots, against scipy", () => {
  const at = [1, 1.3, 1.75, 4.6, 8.125, 13.9, 14.25];
  const judge = () =>
    JSON.parse(
      python(SCRIPT, [], JSON.stringify({ t: [...knots], x: [...x], y: [...y], w: [...weight], at })),
    ) as Record<"coef" | "values", number[]> & Record<"C" | "basis" | "S", number[][]>;

  it("basis, coefficients, values and covariances", () => {
    const theirs = judge();
    const fit = fitSpline(knots, x, y, weight);
    const four = new Float64Array(4);
    at.forEach((u, i) => {
      const first = splineBasis(knots, u, four);
      theirs.basis[i].forEach((value, j) => {
        expect(j >= first && j < first + 4 ? four[j - first] : 0).toBeCloseTo(value, 12);
      });
    });
    fit.coef.forEach((c, i) => {
      expect(c).toBeCloseTo(theirs.coef[i], 9);
    });
    splineValues(fit, at).forEach((value, i) => {
      expect(value).toBeCloseTo(theirs.values[i], 9);
    });
    splineCovariances(fit, at, at).forEach((value, i) => {
      expect(value).toBeCloseTo(theirs.S[i][i], 9);
    });
    const [a, b] = [at.slice(0, 3), at.slice(1, 4)];
    splineCovariances(fit, a, b).forEach((value, i) => {
      expect(value).toBeCloseTo(theirs.S[i][i + 1], 9);
    });
  });
});

describe("splines", () => {
  it("take samples off again: what is left is the fit without them", () => {
    const part = (from: number, to: number) => {
      const normal = emptyNormal(knots);
      addSamples(normal, x.subarray(from, to), y.subarray(from, to), weight.subarray(from, to));
      return normal;
    };
    const all = part(0, 90);
    const odd = part(20, 30);
    addNormal(all, odd, -1);
    const without = weight.map((w, i) => (i >= 20 && i < 30 ? 0 : w));
    const expected = fitSpline(knots, x, y, without);
    solveNormal(all).coef.forEach((c, i) => {
      expect(c).toBeCloseTo(expected.coef[i], 8);
    });
  });

  it("are nothing beyond the ends and where no sample was", () => {
    const fit = fitSpline(
      knots,
      x,
      y,
      weight.map((w, i) => (x[i] > 4.5 && x[i] < 13 ? 0 : w)),
    );
    expect(splineValues(fit, [0.99, 14.26])).toEqual(Float64Array.of(Number.NaN, Number.NaN));
    expect(splineValues(fit, [2])[0]).not.toBeNaN();
    expect(splineValues(fit, [9])[0]).toBeNaN();
    expect(splineCovariances(fit, [9], [9])[0]).toBeNaN();
  });

  it("know how wide their cells are", () => {
    expect([...cellWidths({ knots, coef: new Float64Array(14) }, [1, 1.6, 14.25, 15])]).toEqual([
      0.5,
      0.25,
      1.25,
      Number.NaN,
    ]);
  });
});

describe("functions of many samples at once", () => {
  it("are those of each sample alone, in whatever order and with gaps", () => {
    const mixed = Float64Array.from({ length: 400 }, (_, i) => (i % 7 === 0 ? x[(i * 31) % x.length] : 0.5 + i / 28));
    mixed.set([1, 14.25, Number.NaN, 0, 15, 7, 4.5], 50);
    const bases = splineBases(knots, mixed);
    const one = new Float64Array(4);
    mixed.forEach((at, i) => {
      const first = splineBasis(knots, at, one);
      expect(bases.first[i]).toBe(first);
      if (first >= 0) expect(bases.values.slice(4 * i, 4 * i + 4)).toEqual(one);
    });
  });
});
