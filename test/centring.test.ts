import fc from "fast-check";
import { beforeAll, describe, expect, it } from "vitest";
import { Centring, type CentringSize } from "../src/kernels/centring.js";
import { type Kernels, loadKernels } from "../src/kernels/module.js";
import { type CentringProblem, centreColumn, centreFibres } from "../src/reference/centring.js";
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

/** One round with the weights given. */
function centred(problems: CentringProblem[], size: Omit<CentringSize, "nRow" | "nFibre" | "nColumn">, nPar: 2 | 3) {
  const [{ data, centre }] = problems;
  const whole = { ...size, nRow: data.length, nFibre: centre.length, nColumn: problems.length };
  const door = new Centring(kernels, whole);
  problems.forEach((problem, i) => {
    const weight = Array.from(problem.weight);
    const good = weight.map((w) => (w > 0 ? 1 : 0));
    const variancePerElectron = weight.map(() => 0);
    door.place(i, { data: problem.data, good, fixedVariance: weight.map((w) => 1 / w), variancePerElectron });
    door.guess(i, problem);
  });
  door.measure({ nPar, nRound: 1, near: 1e5, relativeError: 0, kappa: 0, rejectError: 0 });
  return problems.map((_, i) => ({ ...door.result(i), model: door.model(i) }));
}

/** Whether every fibre kept more rows of its core than it has unknowns. Where rejection left fewer, the system is all but
 * singular (solutions of 1e10 e⁻ from light of 1e5), and two ways of rounding part by more than any bound. */
function isDetermined(centre: number[], good: Uint8Array, nPar: number): boolean {
  return centre.every((y0) => good.filter((g, y) => g === 1 && Math.abs(y - y0) <= 2.6).length > nPar);
}

describe("joint centring", () => {
  it("finds a small shift and widening of bright fibres, to the second order that linearisation leaves", () => {
    const c = column(17, 3, 0.02, 0.01);
    const [{ solution }] = centred([c], { neighbours: 2, reach: 7, nBack: 2 }, 3);
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
    const [{ solution, background, model }] = centred([c], { neighbours: 3, reach: 12, nBack: 2 }, 2);
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
          const second = {
            data: first.data.map((d, y) => d * (1 + 0.2 * ((y * 5) % 3))),
            weight: first.weight.map((w, y) => (y % 7 === 2 ? 0 : 0.7 * w)),
            centre: first.centre.map((y, k) => y + 0.21 + 0.01 * (k % 3)),
            sigma: first.sigma.map((s) => 0.9 * s),
          };
          const shape = { neighbours, reach: 6.2, nBack };
          const own = centred([first, second], shape, nPar);
          [first, second].forEach((problem, lane) => {
            const twin = centreFibres(problem, shape, nPar);
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
      { seed: 31, numRuns: 60 },
    );
  });

  it("agrees with the reference on rounds that weigh by their model and leave pixels out", () => {
    let [nCompared, nColumn] = [0, 0];
    fc.assert(
      fc.property(
        fc.integer({ min: 5, max: 9 }),
        fc.nat(500),
        fc.constantFrom<2 | 3>(2, 3),
        fc.integer({ min: 1, max: 3 }),
        fc.constantFrom(1, 2),
        (nFibre, seed, nPar, nRound, pairStep) => {
          const shape = { neighbours: 2, reach: 6.2, nBack: 2 };
          // Five columns: the last one has no neighbour. Fibres move from one to the next.
          const columns = [0, 1, 2, 3, 4].map((i) => {
            const c = column(nFibre, seed, 0.1 - 0.03 * i, 0.02);
            const data = c.data.map((d, y) => d * (1 + 0.001 * ((y * 5 + i) % 3)) + (y % 23 === 7 + i ? 3e4 : 0));
            return {
              data,
              good: data.map((_, y) => (y % 13 === 5 + i ? 0 : 1)),
              fixedVariance: data.map((_, y) => 3 + ((y + i) % 4)),
              variancePerElectron: data.map((_, y) => 0.3 + 0.01 * ((y * 3 + i) % 5)),
              centre: c.centre.map((y, k) => y + 0.06 * i + 0.02 * (k % 3)),
              sigma: c.sigma,
            };
          });
          const rounds = { nPar, nRound, near: 5.5, relativeError: 0.013, kappa: 25, rejectError: 0.02 };
          const size = { ...shape, nRow: columns[0].data.length, nFibre, nColumn: 5 };
          const door = new Centring(kernels, size);
          columns.forEach((c, i) => {
            door.place(i, c);
            door.guess(i, c);
          });
          door.measure(rounds, pairStep);
          columns.forEach((c, i) => {
            if ((i >> 1) % pairStep > 0) {
              expect([...door.model(i)]).toEqual(c.data.map((d, y) => d * c.good[y]));
              return;
            }
            const good = Uint8Array.from(c.good);
            const start = c.data.map((d, y) => d * c.good[y]);
            const twin = centreColumn(c, good, c, start, shape, rounds);
            const own = { ...door.result(i), model: door.model(i) };
            expect([...door.good(i)]).toEqual([...good]);
            nColumn++;
            if (!isDetermined(c.centre, good, nPar)) return;
            nCompared++;
            for (const key of ["solution", "variance", "model", "background"] as const) {
              const largest = Math.max(1e-30, ...twin[key].map(Math.abs));
              own[key].forEach((value, j) => {
                // Condition 10³ once scaled, weights over five decades that every round takes from the last one's model: 1e8 · 2⁻⁵³.
                expect(Math.abs(value - twin[key][j])).toBeLessThan(1e-7 * largest);
              });
            }
            const used = c.data.map((_, y) => good[y] === 1 && c.centre.some((centre) => Math.abs(y - centre) <= 5.5));
            const misfit = door.misfit(i);
            expect(misfit.nPixel).toBe(used.filter((u) => u).length);
            expect(misfit.nUnknown).toBe(2 + twin.solution.filter((x) => x !== 0).length);
            const squares = c.data.reduce((sum, d, y) => sum + (used[y] ? (d - twin.model[y]) ** 2 : 0), 0);
            expect(Math.abs(misfit.residual - squares)).toBeLessThan(1e-6 * (squares + 1));
          });
        },
      ),
      { seed: 32, numRuns: 40 },
    );
    expect(nCompared).toBeGreaterThan(0.7 * nColumn);
  });

  it("says what does not fit", () => {
    const c = column(4, 1, 0, 0);
    const size = { nRow: c.data.length, nFibre: 4, neighbours: 1, reach: 5, nBack: 1, nColumn: 2 };
    const door = new Centring(kernels, size);
    const ones = c.data.map(() => 1);
    expect(() => door.guess(0, { ...c, sigma: [1, 1] })).toThrow("2 widths, but");
    expect(() => door.guess(0, { ...c, sigma: [1, 1, 0, 1] })).toThrow("Fibre 3 has centre");
    expect(() => door.place(1, { data: [1, 2], good: ones, fixedVariance: ones, variancePerElectron: ones })).toThrow(
      `Column of 2, ${ones.length}, `,
    );
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
    const [{ solution, background }] = centred([c], { neighbours: 3, reach, nBack: 2 }, 3);
    // The five-point derivative with h = 1e-3 is good to 1e-12 or so; cancellation in it leaves 1e-12 / h.
    [...solution, ...background].forEach((value, i) => {
      expect(Math.abs(value - expected[i])).toBeLessThan(1e-8 * 1e5);
    });
  });
});
