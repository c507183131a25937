import fc from "fast-check";
import { beforeAll, describe, expect, it } from "vitest";
import { Centring } from "../src/kernels/centring.js";
import { type Kernels, loadKernels } from "../src/kernels/module.js";
import { centreFibres } from "../src/reference/centring.js";
import { erf } from "../src/reference/erf.js";
import { judgeMissing, python } from "./judges.js";

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

/** A column of pixel-integrated Gaussians over a sloping background, every fibre, weight and row different. */
function column(nFibre: number, seed: number, shift: number, widening: number) {
  const uneven = (i: number) => ((i * 7919 + seed * 104729) % 1013) / 1013;
  const pitch = 4.3 + uneven(1);
  const centre = Array.from({ length: nFibre }, (_, k) => 6 + k * pitch + 0.3 * uneven(k + 2));
  const sigma = centre.map((_, k) => 1.02 + 0.1 * uneven(k + 31));
  const light = centre.map((_, k) => (k % 5 === 3 ? 10 : 1e5 * (0.5 + uneven(k + 77))));
  const nRow = Math.ceil(12 + nFibre * (pitch + 0.3));
  const data = Array.from({ length: nRow }, (_, y) => {
    const cdf = (edge: number, k: number) =>
      0.5 * erf((edge - centre[k] - shift) / ((sigma[k] + widening) * Math.SQRT2));
    return light.reduce((sum, a, k) => sum + a * (cdf(y + 0.5, k) - cdf(y - 0.5, k)), 20 + 0.3 * y);
  });
  const weight = data.map((d, y) => (y % 19 === 11 ? 0 : (1 + 0.1 * uneven(y)) / (9 + d)));
  return { data, weight, centre, sigma, light };
}

describe("joint centring", () => {
  it("finds a small shift and widening of bright fibres, to the second order that linearisation leaves", () => {
    const c = column(17, 3, 0.02, 0.01);
    const door = new Centring(kernels, { nRow: c.data.length, nFibre: 17, neighbours: 2, reach: 7, nBack: 2 });
    const [{ solution }] = door.measure([c], 3);
    for (let k = 0; k < 17; k++) {
      if (c.light[k] < 100) continue;
      const [a, u, s] = solution.subarray(3 * k, 3 * k + 3);
      // Second order: the light missed is about δ²/(4σ²) of it, and shifts are off by the share δ·δσ/σ.
      expect(Math.abs(a / c.light[k] - 1)).toBeLessThan(5e-4);
      expect(Math.abs(u / a - 0.02)).toBeLessThan(6e-4);
      expect(Math.abs(s / a - 0.01)).toBeLessThan(8e-4);
    }
  });

  it("is exact where nothing has moved: light, zero shift, background", () => {
    const c = column(9, 5, 0, 0);
    const door = new Centring(kernels, { nRow: c.data.length, nFibre: 9, neighbours: 3, reach: 12, nBack: 2 });
    const [{ solution, background, model }] = door.measure([c], 2);
    for (let k = 0; k < 9; k++) {
      expect(Math.abs(solution[2 * k] - c.light[k])).toBeLessThan(1e-4);
      expect(Math.abs(solution[2 * k + 1])).toBeLessThan(1e-4);
    }
    // 20 + 0.3 y over the rows y = 0 … n − 1 is 20 + 0.15 (n − 1) in the mean, and half of its rise the slope.
    expect(Math.abs(background[0] - (20 + 0.15 * (c.data.length - 1)))).toBeLessThan(1e-4);
    expect(Math.abs(background[1] - 0.15 * (c.data.length - 1))).toBeLessThan(1e-4);
    model.forEach((m, y) => {
      expect(Math.abs(m - c.data[y])).toBeLessThan(1e-4);
    });
  });

  it("agrees between kernel and reference in both lanes", () => {
    fc.assert(
      fc.property(
        fc.integer({ min: 1, max: 24 }),
        fc.nat(500),
        fc.constantFrom<2 | 3>(2, 3),
        fc.integer({ min: 0, max: 3 }),
        fc.integer({ min: 0, max: 4 }),
        (nFibre, seed, nPar, neighbours, nBack) => {
          const first = column(nFibre, seed, 0.1, 0.03);
          const nRow = first.data.length;
          const second = {
            data: first.data.map((d, y) => d * (1 + 0.2 * ((y * 5) % 3))),
            weight: first.weight.map((w, y) => (y % 7 === 2 ? 0 : 0.7 * w)),
            centre: first.centre.map((y, k) => y + 0.21 + 0.01 * (k % 3)),
            sigma: first.sigma.map((s) => 0.9 * s),
          };
          const door = new Centring(kernels, { nRow, nFibre, neighbours, reach: 6.2, nBack });
          const own = door.measure([first, second], nPar);
          [first, second].forEach((problem, lane) => {
            const twin = centreFibres(problem, { nPar, neighbours, reach: 6.2, nBack });
            // Condition of these systems is below 10³ once scaled; 1e5 e⁻ at 2⁻⁵³ each leaves 1e-12 of the largest.
            for (const key of ["solution", "variance", "model", "background"] as const) {
              const largest = Math.max(1e-30, ...twin[key].map(Math.abs));
              own[lane][key].forEach((value, i) => {
                expect(Math.abs(value - twin[key][i])).toBeLessThan(
                  2e-12 * largest * (key === "background" ? 100 : 10),
                );
              });
            }
          });
        },
      ),
      { numRuns: 60 },
    );
  });

  it("says what does not fit", () => {
    const c = column(4, 1, 0, 0);
    const size = { nRow: c.data.length, nFibre: 4, neighbours: 1, reach: 5, nBack: 1 };
    const door = new Centring(kernels, size);
    expect(() => door.measure([{ ...c, sigma: [1, 1] }], 2)).toThrow("2 widths, but");
    expect(() => door.measure([{ ...c, sigma: [1, 1, 0, 1] }], 2)).toThrow("Fibre 3 has centre");
    expect(() => door.measure([c, c, c], 2)).toThrow("3 columns; centre one or two at once.");
    expect(() => new Centring(kernels, { ...size, reach: 0 })).toThrow("counts and reach must be positive");
  });
});

const script = `
import json, sys, numpy as np
from scipy.linalg import lstsq
from scipy.stats import norm
a = json.loads(sys.argv[1])
y = np.arange(len(a['data'])); w = np.sqrt(a['weight'])
P = lambda c, s: np.where(abs(y - c) <= a['reach'], norm.cdf(y + .5, c, s) - norm.cdf(y - .5, c, s), 0)
h = 1e-3
d = lambda f: (8 * (f(h) - f(-h)) - (f(2 * h) - f(-2 * h))) / (12 * h)
Q = lambda c, s, near: np.where(near, norm.cdf(y + .5, c, s) - norm.cdf(y - .5, c, s), 0)
cols = []
for c, s in zip(a['centre'], a['sigma']):
    near = abs(y - c) <= a['reach']
    cols += [P(c, s), d(lambda e: Q(c + e, s, near)), d(lambda e: Q(c, s + e, near))]
t = 2 * y / (len(y) - 1) - 1
cols += [np.ones(len(y)), t]
A = np.array(cols).T * w[:, None]
print(json.dumps(lstsq(A, np.array(a['data']) * w)[0].tolist()))
`;

describe.skipIf(judgeMissing("scipy"))("joint centring against scipy", () => {
  it("solves the same weighted least squares as linalg.lstsq on columns by numerical differentiation", () => {
    const c = column(11, 8, 0.12, -0.04);
    const reach = 5.5;
    const input = JSON.stringify({ ...c, reach });
    const expected: number[] = JSON.parse(python(script, [input]));
    const door = new Centring(kernels, { nRow: c.data.length, nFibre: 11, neighbours: 3, reach, nBack: 2 });
    const [{ solution, background }] = door.measure([c], 3);
    // The five-point derivative with h = 1e-3 is good to 1e-12 or so; cancellation in it leaves 1e-12 / h.
    [...solution, ...background].forEach((value, i) => {
      expect(Math.abs(value - expected[i])).toBeLessThan(1e-8 * 1e5);
    });
  });
});
