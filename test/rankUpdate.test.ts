import fc from "fast-check";
import { beforeAll, describe, expect, it } from "vitest";
import { type Kernels, loadKernels } from "../src/kernels/module.js";
import { NormalMatrix } from "../src/kernels/rankUpdate.js";
import { rankUpdate } from "../src/reference/rankUpdate.js";
import { judgeMissing, python } from "./judges.js";
import { normalDeviate, seeded } from "./scene.js";

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

interface Case {
  nRow: number;
  n: number;
  g: Float64Array;
  weights: Float64Array;
}

/** Rows of spread sizes; some hold zeros, as windows of fibres do, and some weigh nothing or less than nothing. */
function drawCase(nRow: number, n: number, seed: number, emptyShare: number): Case {
  const next = seeded(seed);
  const g = Float64Array.from({ length: nRow * n }, () =>
    next() < emptyShare ? 0 : normalDeviate(next) * 50 ** next(),
  );
  const weights = Float64Array.from({ length: nRow }, (_, i) => (i % 5 === 3 ? 0 : (next() - 0.3) * 10));
  return { nRow, n, g, weights };
}

/** The lower triangle, row by row. */
function lower(normal: ArrayLike<number>, n: number): number[] {
  return Array.from({ length: n }, (_, r) => Array.from({ length: r + 1 }, (_, c) => normal[r * n + c])).flat();
}

/** The same of Σ |w g gᵀ|: rounding is a share of it. */
function sizes({ nRow, n, g, weights }: Case): number[] {
  const normal = new Float64Array(n * n);
  rankUpdate(g.map(Math.abs), weights.map(Math.abs), nRow, n, normal);
  return lower(normal, n);
}

function runKernel({ nRow, n, g, weights }: Case, spareRows = 0): number[] {
  const matrix = new NormalMatrix(kernels, n, nRow + spareRows);
  matrix.rows.fill(Number.NaN); // rows that are not asked for must not be read
  matrix.rows.set(g);
  matrix.weights.fill(Number.NaN);
  matrix.weights.set(weights);
  matrix.add(nRow);
  return lower(matrix.normal, n);
}

function runReference({ nRow, n, g, weights }: Case): number[] {
  const normal = new Float64Array(n * n);
  rankUpdate(g, weights, nRow, n, normal);
  return lower(normal, n);
}

/** Rounding of a sum of nRow products of three factors, in whatever order: (nRow + 2)·2⁻⁵³ of the sum of absolute values
 * each way (Higham 2002, Accuracy and Stability of Numerical Algorithms, §3.1). */
function expectAgreement(found: number[], wanted: number[], problem: Case): void {
  const size = sizes(problem);
  const bound = 2 * (problem.nRow + 2) * 2 ** -53;
  expect(found.length).toBe(wanted.length);
  const worst = Math.max(...found.map((value, i) => Math.abs(value - wanted[i]) - bound * size[i]));
  expect(worst).toBeLessThanOrEqual(0);
}

describe("normal matrix of weighted rows", () => {
  it("is the reference's for any number of rows and any even number of unknowns, empty rows included", () => {
    fc.assert(
      fc.property(
        fc.integer({ min: 0, max: 23 }),
        fc.integer({ min: 1, max: 13 }),
        fc.integer({ min: 1, max: 1e6 }),
        fc.constantFrom(0, 0.5, 0.93),
        (nRow, half, seed, emptyShare) => {
          const problem = drawCase(nRow, 2 * half, seed, emptyShare);
          expectAgreement(runKernel(problem, 3), runReference(problem), problem);
        },
      ),
    );
  });

  it("adds to what was there before: nine rows at once are five and four", () => {
    const problem = drawCase(9, 14, 77, 0.2);
    const matrix = new NormalMatrix(kernels, 14, 5);
    for (const [from, to] of [
      [0, 5],
      [5, 9],
    ]) {
      matrix.rows.set(problem.g.subarray(from * 14, to * 14));
      matrix.weights.set(problem.weights.subarray(from, to));
      matrix.add(to - from);
    }
    expectAgreement(lower(matrix.normal, 14), runReference(problem), problem);
  });

  it("lets a row of one single number touch one single place", () => {
    const matrix = new NormalMatrix(kernels, 6, 1);
    matrix.rows.set([0, 0, 0, 7, 0, 0]);
    matrix.weights[0] = -0.5;
    matrix.add(1);
    expect(lower(matrix.normal, 6).flatMap((value, i) => (value === 0 ? [] : [[i, value]]))).toEqual([[9, -24.5]]);
  });

  it.skipIf(judgeMissing("scipy"))("is Gᵀ W G by numpy (OpenBLAS), at the size of a profile step", () => {
    const problem = drawCase(203, 234, 5, 0.6);
    const script =
      "import json,sys,numpy as np;a=json.load(sys.stdin);" +
      "g=np.array(a['g']).reshape(a['nRow'],a['n']);m=(g.T*np.array(a['weights']))@g;" +
      "print(json.dumps(m[np.tril_indices(a['n'])].tolist()))";
    const { nRow, n } = problem;
    const input = JSON.stringify({ nRow, n, g: [...problem.g], weights: [...problem.weights] });
    const wanted: number[] = JSON.parse(python(script, [], input));
    expectAgreement(runKernel(problem), wanted, problem);
    expectAgreement(runReference(problem), wanted, problem);
  });

  it("refuses an odd number of unknowns and more rows than there is room for", () => {
    expect(() => new NormalMatrix(kernels, 7, 3)).toThrow(
      "A normal matrix of 7 unknowns; the kernel wants an even number.",
    );
    expect(() => new NormalMatrix(kernels, 8, 3).add(4)).toThrow("4 rows, but there is room for 3.");
  });
});
