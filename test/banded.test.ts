import fc from "fast-check";
import { beforeAll, describe, expect, it } from "vitest";
import { type BandedSystem, solveBandedSystems } from "../src/kernels/banded.js";
import { type Kernels, loadKernels } from "../src/kernels/module.js";
import { factorBand, inverseBand, solveBand } from "../src/reference/banded.js";
import { judgeMissing, python } from "./judges.js";

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

function solveByReference({ band, rhs }: BandedSystem, n: number, b: number) {
  const factors = band.slice();
  factorBand(factors, n, b);
  const x = rhs.slice();
  solveBand(factors, n, b, x);
  return { x, inverse: inverseBand(factors, n, b) };
}

/** A band that is positive because its diagonal outweighs each row (Gershgorin), every entry different. */
function dominantSystem(n: number, b: number, next: () => number): BandedSystem {
  const band = Float64Array.from({ length: n * (b + 1) }, () => next() - 0.5);
  for (let i = 0; i < n; i++) band[i * (b + 1)] = 0.6 * b + 0.5 + next();
  return { band, rhs: Float64Array.from({ length: n }, () => 10 * next() - 5) };
}

function seeded(seed: number): () => number {
  let state = seed >>> 0 || 1;
  return () => {
    state = (Math.imul(state, 1664525) + 1013904223) >>> 0; // Numerical Recipes' quick generator
    return state / 2 ** 32;
  };
}

function product({ band }: BandedSystem, n: number, b: number, x: Float64Array): Float64Array {
  const y = new Float64Array(n);
  for (let i = 0; i < n; i++) {
    for (let j = 0; j <= Math.min(i, b); j++) {
      y[i] += band[i * (b + 1) + j] * x[i - j];
      if (j > 0) y[i - j] += band[i * (b + 1) + j] * x[i];
    }
  }
  return y;
}

const scipyScript = `
import json, sys
import numpy as np
from scipy.linalg import solveh_banded
q = json.loads(sys.argv[1])
n, b = q["n"], q["b"]
band, dense, lower = np.array(q["band"]).reshape(n, b + 1), np.zeros((n, n)), np.zeros((b + 1, n))
for i in range(n):
    for j in range(min(i, b) + 1):
        dense[i, i - j] = dense[i - j, i] = lower[j, i - j] = band[i, j]
print(json.dumps({"x": solveh_banded(lower, q["rhs"], lower=True).tolist(), "inverse": np.linalg.inv(dense).tolist()}))
`;

describe("banded systems", () => {
  it("invert the second-difference matrix as the closed form says: min(i,j)·(n+1−max(i,j))/(n+1)", () => {
    // Closed form of the inverse of tridiag(−1, 2, −1), i and j from 1: common in textbooks on finite differences.
    const n = 37;
    const band = new Float64Array(2 * n);
    for (let i = 0; i < n; i++) band.set([2, -1], 2 * i);
    const { inverse } = solveByReference({ band, rhs: new Float64Array(n) }, n, 1);
    for (let i = 1; i <= n; i++) {
      expect(Math.abs(inverse[2 * (i - 1)] - (i * (n + 1 - i)) / (n + 1))).toBeLessThan(1e-12);
      if (i > 1) expect(Math.abs(inverse[2 * (i - 1) + 1] - ((i - 1) * (n + 1 - i)) / (n + 1))).toBeLessThan(1e-12);
    }
  });

  it("are solved: M x gives back the right-hand side, for every size and bandwidth", () => {
    fc.assert(
      fc.property(fc.integer({ min: 1, max: 40 }), fc.integer({ min: 0, max: 6 }), fc.nat(), (n, b, seed) => {
        const system = dominantSystem(n, b, seeded(seed));
        const { x } = solveByReference(system, n, b);
        const back = product(system, n, b, x);
        for (let i = 0; i < n; i++) expect(Math.abs(back[i] - system.rhs[i])).toBeLessThan(1e-12);
      }),
      { seed: 11, numRuns: 200 },
    );
  });

  it("come out of the lanes as from the reference, each lane its own system", () => {
    fc.assert(
      fc.property(fc.integer({ min: 1, max: 40 }), fc.integer({ min: 0, max: 6 }), fc.nat(), (n, b, seed) => {
        const next = seeded(seed);
        for (const precision of ["f32", "f64"] as const) {
          const systems = Array.from({ length: precision === "f32" ? 4 : 2 }, () => dominantSystem(n, b, next));
          const solved = solveBandedSystems(kernels, systems, n, b, precision);
          const bound = precision === "f32" ? 2e-5 : 1e-13; // a few rounding steps of each number at this size
          systems.forEach((system, lane) => {
            const expected = solveByReference(system, n, b);
            for (let i = 0; i < n; i++) expect(Math.abs(solved[lane].x[i] - expected.x[i])).toBeLessThan(bound * 10);
            for (let i = 0; i < n * (b + 1); i++) {
              if (i % (b + 1) > Math.floor(i / (b + 1))) continue; // above the matrix
              expect(Math.abs(solved[lane].inverse[i] - expected.inverse[i])).toBeLessThan(bound);
            }
          });
        }
      }),
      { seed: 5, numRuns: 60 },
    );
  });

  it.skipIf(judgeMissing("scipy"))("agree with scipy.linalg.solveh_banded and with numpy's dense inverse", () => {
    const [n, b] = [60, 3];
    const system = dominantSystem(n, b, seeded(77));
    const judged = JSON.parse(
      python(scipyScript, [JSON.stringify({ n, b, band: [...system.band], rhs: [...system.rhs] })]),
    );
    for (const found of [solveByReference(system, n, b), solveBandedSystems(kernels, [system], n, b, "f64")[0]]) {
      for (let i = 0; i < n; i++) {
        expect(Math.abs(found.x[i] - judged.x[i])).toBeLessThan(1e-13 * (1 + Math.abs(judged.x[i])));
        for (let j = 0; j <= Math.min(i, b); j++) {
          expect(Math.abs(found.inverse[i * (b + 1) + j] - judged.inverse[i][i - j])).toBeLessThan(1e-14);
        }
      }
    }
  });

  it("drop an unknown that nothing measures and solve the others as if it were not there", () => {
    const system = dominantSystem(9, 2, seeded(3));
    const without = 4;
    for (let i = 0; i < 9; i++) {
      for (let j = 0; j <= Math.min(i, 2); j++) if (i === without || i - j === without) system.band[i * 3 + j] = 0;
    }
    system.rhs[without] = 0;
    for (const { x, inverse } of [
      solveByReference(system, 9, 2),
      solveBandedSystems(kernels, [system], 9, 2, "f64")[0],
    ]) {
      expect(x[without]).toBe(0);
      expect(inverse[without * 3]).toBe(0);
      const back = product(system, 9, 2, x);
      for (let i = 0; i < 9; i++) expect(Math.abs(back[i] - system.rhs[i])).toBeLessThan(1e-12);
    }
  });

  it("of two unknowns that cannot be told apart, keep one and give the other no variance", () => {
    const band = Float64Array.from([1, 0, 1, 1]); // [[1, 1], [1, 1]]
    const { inverse, x } = solveByReference({ band, rhs: Float64Array.from([3, 3]) }, 2, 1);
    expect([...x]).toEqual([3, 0]);
    expect([inverse[0], inverse[2]]).toEqual([1, 0]);
  });

  it("refuse lengths that do not fit", () => {
    const system = { band: new Float64Array(7), rhs: new Float64Array(4) };
    expect(() => solveBandedSystems(kernels, [system], 4, 1, "f64")).toThrow(
      "band of 7 and rhs of 4, but n = 4, b = 1 need 8 and 4.",
    );
  });
});
