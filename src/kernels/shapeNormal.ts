/** Door to assembly/shapeNormal.ts: normal equations of many columns in a shape's coefficients and a background. */

import { legendreArgument, legendreBasis } from "../reference/legendre.js";
import { nShapeTerm } from "../reference/shape.js";
import { nBackground, nBackgroundX, nBackgroundY } from "../reference/shapeBackground.js";
import type { ShapeBasis } from "../reference/shapeBasis.js";
import type { Kernels } from "./module.js";
import { blockIndex } from "./rankUpdate.js";
import { ShapeWord } from "./shape-words.js";
import { ShapeColumnBench } from "./shapeColumn.js";
import type { ShapeProblem } from "./shapeMemory.js";

/** Sums over columns. */
export interface NormalSums {
  chi2: number;
  nGood: number;
}

/** Adds every column's normal equations, local unknowns eliminated, to `normal`: n × n with a column more than unknowns, as
 * src/reference/shapeNormal.ts has it; column ≤ row is kept up. Columns are added in their order, whoever made them. */
export function addShapeNormals(
  kernels: Kernels,
  problem: ShapeProblem,
  basis: ShapeBasis,
  clip: number,
  normal: Float64Array,
): NormalSums {
  const laid = new ShapeColumnBench(kernels, problem, clip, basis);
  laid.run("shapeNormals");
  const nBlock = basis.nSpline + 2;
  const sums = { chi2: 0, nGood: 0 };
  problem.columns.forEach(({ x }, i) => {
    const blocks = laid.answer(ShapeWord.normal, i, 8 * nBlock * (nBlock + 1));
    spreadOverTerms(blocks, basis.nSpline, legendreArgument(x, problem.lines.nx), normal);
    const [chi2, nGood] = laid.answer(ShapeWord.chi2, i, 2);
    sums.chi2 += chi2;
    sums.nGood += nGood;
  });
  return sums;
}

/** In one column x is a number: terms that differ by a function of x have the same derivatives but for that factor, so the
 * kernel knows one of each. Which one, of a spline's four, and the factor as an order in x: shape.ts tells the terms. */
const termOf = [0, 0, 0, 1, 2, 1, 3];
const orderOf = [0, 1, 2, 0, 0, 1, 0];

/** normal += one column's, at x ∈ [−1, 1]. */
function spreadOverTerms(blocks: Float64Array, nSpline: number, x: number, normal: Float64Array): void {
  const nShape = nSpline * nShapeTerm;
  const n = nShape + nBackground + 1;
  const inX = legendreBasis(x, Math.max(nBackgroundX, 3));
  const place = new Int32Array(n);
  const factor = new Float64Array(n);
  for (let i = 0; i < nShape; i++) {
    const m = i % nShapeTerm;
    place[i] = 4 * ((i - m) / nShapeTerm) + termOf[m];
    factor[i] = inX[orderOf[m]];
  }
  for (let i = 0; i < nBackground; i++) {
    place[nShape + i] = 4 * nSpline + (i % nBackgroundY);
    factor[nShape + i] = inX[Math.floor(i / nBackgroundY)];
  }
  place[n - 1] = 4 * nSpline + nBackgroundY;
  factor[n - 1] = 1;
  for (let i = 0; i < n; i++) {
    for (let j = 0; j <= i; j++) {
      const [row, column] = place[i] >= place[j] ? [place[i], place[j]] : [place[j], place[i]];
      normal[i * n + j] += factor[i] * factor[j] * blocks[blockIndex(row, column)];
    }
  }
}
