import { beforeAll, describe, expect, it } from "vitest";
import { type Kernels, loadKernels } from "../../../src/kernels/module.js";
import { nShapeTerm } from "../../../src/reference/shape.js";
import { basisAt, emptyEdge, type ShapeBasis } from "../../../src/reference/shapeBasis.js";
import { hermiteBasis, hermiteStart, nHermiteFunction } from "../../../src/tramlines/shape/hermiteBasis.js";
import { judgeMissing, python } from "../../judges.js";

const sigma = 1.13;
let basis: ShapeBasis;
beforeAll(async () => {
  const kernels: Kernels = await loadKernels();
  basis = hermiteBasis(kernels, sigma);
});

/** Value and integral of function j at point i of the table. */
const value = (i: number, j: number) => basis.values[i * 2 * nHermiteFunction + nHermiteFunction + j];
const integral = (i: number, j: number) => basis.values[i * 2 * nHermiteFunction + j];
const v = (i: number) => basis.start + i * basis.step;

describe("Gauss–Hermite functions and wings", () => {
  it("have the values of the published polynomials (van der Marel & Franx 1993, ApJ 407, 525, appendix A; from memory)", () => {
    const polynomials = [
      () => 1,
      (y: number) => (2 * Math.SQRT2 * y ** 3 - 3 * Math.SQRT2 * y) / Math.sqrt(6),
      (y: number) => (4 * y ** 4 - 12 * y ** 2 + 3) / Math.sqrt(24),
      (y: number) => (4 * Math.SQRT2 * y ** 5 - 20 * Math.SQRT2 * y ** 3 + 15 * Math.SQRT2 * y) / Math.sqrt(120),
      (y: number) => (8 * y ** 6 - 60 * y ** 4 + 90 * y ** 2 - 15) / Math.sqrt(720),
    ];
    for (let i = 0; i < basis.n; i++) {
      const y = v(i) / sigma;
      const alpha = Math.exp((-y * y) / 2) / (Math.sqrt(2 * Math.PI) * sigma);
      polynomials.forEach((polynomial, j) => {
        expect(Math.abs(value(i, j) - alpha * polynomial(y))).toBeLessThan(3e-15 * (1 + Math.abs(polynomial(y))));
      });
    }
  });

  it.skipIf(judgeMissing("scipy"))("have integrals and wings as scipy's quadrature finds them", () => {
    const points = [37, 402, 583, 640, 655, 701, 880, 1280];
    const script = `
import json, sys, numpy as np
from scipy.integrate import quad
from scipy.special import eval_hermite, factorial
s, low = 1.13, -20.0
def f(j): return lambda y: eval_hermite(j, y) / np.sqrt(2.0**j * factorial(j)) * np.exp(-y*y/2) / np.sqrt(2*np.pi)
def wing(L): return lambda y: np.exp(-abs(y)/L) / (2*L)
functions = [f(0), f(3), f(4), f(5), f(6), wing(2.0), wing(6.0)]
def integral(g, y):
    cuts = [low] + [c for c in (-6.0, -3.0, 0.0, 3.0, 6.0) if c < y] + [y]
    return sum(quad(g, a, b, epsabs=1e-14, epsrel=1e-13)[0] for a, b in zip(cuts, cuts[1:]))
print(json.dumps([[[integral(g, -20 + i/32), g(-20 + i/32) / s] for g in functions] for i in ${JSON.stringify(points)}]))
`;
    const found = JSON.parse(python(script)) as [number, number][][];
    found.forEach((functions, p) => {
      functions.forEach(([below, slope], j) => {
        expect(Math.abs(integral(points[p], j) - below)).toBeLessThan(1e-13);
        expect(Math.abs(value(points[p], j) - slope)).toBeLessThan(1e-14);
      });
    });
    expect(found.length).toBe(points.length);
  });

  it("are orthogonal under α², as the series must be", () => {
    for (let a = 0; a < 5; a++) {
      for (let b = 0; b < 5; b++) {
        let sum = 0;
        for (let i = 0; i < basis.n; i++) sum += value(i, a) * value(i, b) * basis.step;
        // ∫ α² = 1 / (2 √π σ).
        expect(Math.abs(sum * 2 * Math.sqrt(Math.PI) * sigma - (a === b ? 1 : 0))).toBeLessThan(1e-13);
      }
    }
  });

  it("are whole at the table's end, and between its points follow their integral to 2e-7", () => {
    const edge = emptyEdge(basis);
    basisAt(basis, 1e9, edge);
    for (let j = 0; j < nHermiteFunction; j++) expect(edge.integral[j]).toBeCloseTo(basis.whole[j], 14);
    const fine = (y: number, length: number) => (y < 0 ? 0.5 * Math.exp(y / length) : 1 - 0.5 * Math.exp(-y / length));
    for (let y = -19.7; y < 19.7; y += 0.0873) {
      basisAt(basis, y * sigma, edge);
      for (const [j, length] of [2, 6].entries()) {
        const truth = fine(y, length) - 0.5 * Math.exp(-20 / length);
        expect(Math.abs(edge.integral[5 + j] - truth)).toBeLessThan(2e-7);
      }
    }
  });

  it("start as a Gaussian with a little wing in each of them", () => {
    const start = hermiteStart();
    expect(start.length).toBe(nHermiteFunction * nShapeTerm);
    expect(start[0] + start[5 * nShapeTerm] + start[6 * nShapeTerm]).toBeCloseTo(1, 15);
    expect(start.filter((c) => c !== 0).length).toBe(3);
  });
});
