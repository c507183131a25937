import fc from "fast-check";
import { beforeAll, describe, expect, it } from "vitest";
import { type Kernels, loadKernels } from "../src/kernels/module.js";
import { blockIndex, NormalMatrix } from "../src/kernels/rankUpdate.js";
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
}

/** Rows of spread sizes; some hold zeros, as windows of fibres do. */
function drawCase(nRow: number, n: number, seed: number, emptyShare: number): Case {
  const next = seeded(seed);
  const g = Float64Array.from({ length: nRow * n }, () =>
    next() < emptyShare ? 0 : normalDeviate(next) * 50 ** next(),
  );
  return { nRow, n, g };
}

/** The lower triangle, row by row. */
function lower(n: number, entry: (row: number, column: number) => number): number[] {
  return Array.from({ length: n }, (_, r) => Array.from({ length: r + 1 }, (_, c) => entry(r, c))).flat();
}

/** The same of Σ |g gᵀ|: rounding is a share of it. */
function sizes(problem: Case): number[] {
  return runReference({ ...problem, g: problem.g.map(Math.abs) }, 1);
}

function ofMatrix({ n, blocks }: NormalMatrix): number[] {
  return lower(n, (r, c) => blocks[blockIndex(r, c)]);
}

function runKernel({ nRow, n, g }: Case, sign: 1 | -1, spareRows = 0): number[] {
  const matrix = new NormalMatrix(kernels, n, nRow + spareRows);
  matrix.rows.fill(Number.NaN); // rows that are not asked for must not be read
  matrix.rows.set(g);
  matrix.add(nRow, sign);
  return ofMatrix(matrix);
}

function runReference({ nRow, n, g }: Case, sign: 1 | -1): number[] {
  const normal = new Float64Array(n * n);
  rankUpdate(g, nRow, n, sign, normal);
  return lower(n, (r, c) => normal[r * n + c]);
}

/** Rounding of a sum of nRow products, in whatever order: (nRow + 2)·2⁻⁵³ of the sum of absolute values
 * each way (Higham 2002, Accuracy and Stability of Numerical Algorithms, §3.1). */
function expectAgreement(found: number[], wanted: number[], problem: Case): void {
  const size = sizes(problem);
  const bound = 2 * (problem.nRow + 2) * 2 ** -53;
  expect(found.length).toBe(wanted.length);
  const worst = Math.max(...found.map((value, i) => Math.abs(value - wanted[i]) - bound * size[i]));
  expect(worst).toBeLessThanOrEqual(0);
}

describe("normal matrix of rows", () => {
  it("is the reference's for any number of rows and any four unknowns to a block, empty places included", () => {
    fc.assert(
      fc.property(
        fc.integer({ min: 0, max: 83 }),
        fc.integer({ min: 1, max: 7 }),
        fc.integer({ min: 1, max: 1e6 }),
        fc.constantFrom(0, 0.5, 0.93),
        fc.constantFrom(1, -1),
        (nRow, nBlock, seed, emptyShare, sign) => {
          const problem = drawCase(nRow, 4 * nBlock, seed, emptyShare);
          expectAgreement(runKernel(problem, sign, 3), runReference(problem, sign), problem);
        },
      ),
    );
  });

  it("adds to what was there before, and takes away: nine rows less four are five", () => {
    const problem = drawCase(9, 16, 77, 0.2);
    const matrix = new NormalMatrix(kernels, 16, 9);
    matrix.rows.set(problem.g);
    matrix.add(9, 1);
    matrix.rows.set(problem.g.subarray(5 * 16));
    matrix.add(4, -1);
    const five = { ...problem, nRow: 5, g: problem.g.slice(0, 5 * 16) };
    expectAgreement(ofMatrix(matrix), runReference(five, 1), problem);
  });

  it("lets a row of one single number touch one single place", () => {
    const matrix = new NormalMatrix(kernels, 8, 1);
    matrix.rows.set([0, 0, 0, 7, 0, 0, 0, 0]);
    matrix.add(1, -1);
    expect(ofMatrix(matrix).flatMap((value, i) => (value === 0 ? [] : [[i, value]]))).toEqual([[9, -49]]);
  });

  it.skipIf(judgeMissing("scipy"))("is GᵀG by numpy (OpenBLAS), at the size of a profile step", () => {
    const problem = drawCase(203, 132, 5, 0.6);
    const script =
      "import json,sys,numpy as np;a=json.load(sys.stdin);" +
      "g=np.array(a['g']).reshape(a['nRow'],a['n']);m=g.T@g;" +
      "print(json.dumps(m[np.tril_indices(a['n'])].tolist()))";
    const input = JSON.stringify({ ...problem, g: [...problem.g] });
    const wanted: number[] = JSON.parse(python(script, [], input));
    expectAgreement(runKernel(problem, 1), wanted, problem);
    expectAgreement(runReference(problem, 1), wanted, problem);
  });

  it("refuses unknowns that fill no blocks and more rows than there is room for", () => {
    expect(() => new NormalMatrix(kernels, 6, 3)).toThrow(
      "A normal matrix of 6 unknowns; the kernel wants a multiple of 4.",
    );
    expect(() => new NormalMatrix(kernels, 8, 3).add(4, 1)).toThrow("4 rows, but there is room for 3.");
  });
});
