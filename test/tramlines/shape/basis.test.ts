import { describe, expect, it } from "vitest";
import { nShapeTerm } from "../../../src/reference/shape.js";
import { basisAt, emptyEdge } from "../../../src/reference/shapeBasis.js";
import { nSpline, shapeBasis, tabulate } from "../../../src/tramlines/shape/basis.js";
import { judgeMissing, python } from "../../judges.js";

const width = 1.17;
const basis = shapeBasis(width);
const value = (i: number, j: number) => basis.values[i * 2 * nSpline + nSpline + j];
const integral = (i: number, j: number) => basis.values[i * 2 * nSpline + j];
/** The spline's knots, pixels at a width of 1.04, as profiles are laid out on. */
const positive = [0.4, 0.8, 1.2, 1.6, 2, 2.4, 2.8, 3.2, 3.6, 4.3, 5.2, 6.4, 8, 10.2, 13, 16.5, 20.5];

describe("splines of a shape", () => {
  it.skipIf(judgeMissing("scipy"))("are those of scipy.interpolate.BSpline, integrals included", () => {
    const points = [0, 5, 171, 402, 500, 583, 640, 656, 657, 701, 880, 1111, 1300, basis.n - 1];
    const script = `
import json, numpy as np
from scipy.interpolate import BSpline
p = np.array(${JSON.stringify(positive)})
t = np.concatenate([-p[::-1], [0.0], p]) * ${width} / 1.04
v = ${basis.start} + np.array(${JSON.stringify(points)}) * ${basis.step}
out = []
for j in range(len(t) - 4):
    b = BSpline.basis_element(t[j:j+5], extrapolate=False)
    inside = np.clip(v, t[j], t[j+4])
    out.append([np.nan_to_num(b(v)).tolist(), [float(b.integrate(t[j], x)) for x in inside], float(b.integrate(t[j], t[j+4]))])
print(json.dumps(out))
`;
    const splines = JSON.parse(python(script)) as [number[], number[], number][];
    expect(splines.length).toBe(nSpline);
    splines.forEach(([values, integrals, whole], j) => {
      expect(Math.abs(basis.whole[j] - whole)).toBeLessThan(1e-13);
      points.forEach((i, p) => {
        expect(Math.abs(value(i, j) - values[p])).toBeLessThan(2e-13);
        expect(Math.abs(integral(i, j) - integrals[p])).toBeLessThan(1e-12);
      });
    });
  });

  it("sum to 1 wherever four of them overlap, and are never negative (de Boor 1978, chapter IX)", () => {
    const inner = (13 * width) / 1.04;
    let seen = 0;
    for (let i = 0; i < basis.n; i++) {
      let sum = 0;
      for (let j = 0; j < nSpline; j++) {
        expect(value(i, j)).toBeGreaterThanOrEqual(0);
        sum += value(i, j);
      }
      if (Math.abs(basis.start + i * basis.step) > (8 * width) / 1.04) continue;
      expect(Math.abs(sum - 1)).toBeLessThan(1e-13);
      seen++;
    }
    expect(seen * basis.step).toBeGreaterThan(inner);
  });

  it("are the slopes of their integrals, between the table's points too", () => {
    const [low, high] = [emptyEdge(basis), emptyEdge(basis)];
    const h = basis.step / 64;
    for (let i = 3; i < basis.n - 3; i += 7) {
      const v = basis.start + i * basis.step;
      basisAt(basis, v - h, low);
      basisAt(basis, v + h, high);
      for (let j = 0; j < nSpline; j++) {
        expect(Math.abs((high.integral[j] - low.integral[j]) / (2 * h) - value(i, j))).toBeLessThan(2e-4);
      }
    }
  });

  it("count none twice: those before the first are whole, those behind the last have not begun", () => {
    const edge = emptyEdge(basis);
    for (let v = -21; v < 21; v += 0.0931) {
      basisAt(basis, v, edge);
      for (let j = 0; j < nSpline; j++) {
        if (j < edge.first) expect(edge.integral[j]).toBe(basis.whole[j]);
        if (j > edge.last) expect(edge.integral[j]).toBe(0);
      }
      expect(edge.last - edge.first).toBeLessThan(6);
    }
  });

  it("make a table that holds each coefficient's share of every term", () => {
    const c = Float64Array.from({ length: nSpline * nShapeTerm }, (_, i) => Math.sin(1 + 0.7 * i) * (1 + i / 50));
    const table = tabulate(basis, c);
    const last = (basis.n - 1) * 2 * nShapeTerm;
    for (let m = 0; m < nShapeTerm; m++) {
      let whole = 0;
      for (let j = 0; j < nSpline; j++) whole += c[j * nShapeTerm + m] * basis.whole[j];
      expect(Math.abs(table.values[last + m] - whole)).toBeLessThan(1e-12);
      expect(table.values[m]).toBe(0);
    }
  });
});
