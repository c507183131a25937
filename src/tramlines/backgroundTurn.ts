/** A smooth background told apart from the fibres' light: one turn of a fit of both at once. In sampled columns every fibre's
 * flux and a Legendre surface b(x, y) are fitted, the fluxes eliminated (assembly/backgroundNormal.ts). Every pixel tells, not
 * those alone that no fibre reaches: of 5 px from one fibre to the next a good half of one is still free. */
import { type ColumnFits, type ColumnSample, groupColumns, mostX, mostY } from "../kernels/columnFit.js";
import { factorBand, inverseBand, solveBand } from "../reference/banded.js";
import type { SmoothBackground } from "../reference/extract.js";
import { legendreArgument, legendreBasis } from "../reference/legendre.js";

/** Pixels of a side that a term needs at least. */
const termPixels = 48;
const nMatrix = (mostY * (mostY + 1)) / 2;
const nNumber = nMatrix + mostY;

export interface ToldBackground extends SmoothBackground {
  /** Standard error from noise alone, root mean square over the rows that hold values, e⁻ per pixel. */
  error: () => number;
}

/** The background after a fit, with its normal equations, that took `before` for it. */
export function backgroundTurn(sample: ColumnSample, fits: ColumnFits, before: SmoothBackground): ToldBackground {
  const rows = seenRows(sample);
  const nX = termsAlong(sample.nx, mostX);
  // Terms made for all rows would swing where half of them are left.
  const nY = Math.max(1, Math.round(termsAlong(sample.ny, mostY) * (rows.length / sample.ny)));
  return solve(sumNormal(sample, fits, nX), before, nX, nY, rows);
}

function termsAlong(n: number, most: number): number {
  return Math.min(most, 1 + Math.floor(n / termPixels));
}

/** Σ over the columns of P_a P_b · (normal equations in y) and of P_a · (their right-hand sides): [(a, b ≤ a) × nNumber], the
 * right-hand sides where b is 0. */
function sumNormal({ nx, firstColumns }: ColumnSample, { groups, normal }: ColumnFits, nX: number): Float64Array {
  const sum = new Float64Array(((nX * (nX + 1)) / 2) * nNumber);
  for (const g of groups) {
    for (let c = 0; c < groupColumns && firstColumns[g] + c < nx; c++) {
      const inX = legendreBasis(legendreArgument(firstColumns[g] + c, nx), nX);
      const from = g * nNumber * groupColumns + c;
      let to = 0;
      for (let a = 0; a < nX; a++) {
        for (let b = 0; b <= a; b++) {
          const last = b === 0 ? nNumber : nMatrix;
          for (let i = 0; i < last; i++) sum[to + i] += inX[a] * inX[b] * normal[from + i * groupColumns];
          to += nNumber;
        }
      }
    }
  }
  return sum;
}

/** The surface from its normal equations, which are those of what `before` left. A weak prior, that no term is larger than the
 * level over its order, keeps terms quiet that nothing tells. */
function solve(normal: Float64Array, before: SmoothBackground, nX: number, nY: number, rows: number[]): ToldBackground {
  const n = nX * nY;
  const old = new Float64Array(n);
  for (let i = 0; i < Math.min(nX, before.nX); i++) {
    for (let j = 0; j < Math.min(nY, before.nY); j++) old[i * nY + j] = before.coefficients[i * before.nY + j];
  }
  const level = Math.max(1, Math.abs(old[0]));
  const band = new Float64Array(n * n);
  const step = new Float64Array(n);
  for (let i = 0; i < n; i++) {
    const [a, j] = [Math.floor(i / nY), i % nY];
    for (let m = 0; m <= i; m++) {
      const l = m % nY;
      const inX = (a * (a + 1)) / 2 + Math.floor(m / nY);
      const inY = j >= l ? (j * (j + 1)) / 2 + l : (l * (l + 1)) / 2 + j;
      band[i * n + i - m] = normal[inX * nNumber + inY];
    }
    const order = (a + j) / level;
    band[i * n] += order * order;
    step[i] = normal[((a * (a + 1)) / 2) * nNumber + nMatrix + j] - order * order * old[i];
  }
  factorBand(band, n, n - 1);
  solveBand(band, n, n - 1, step);
  return { nX, nY, coefficients: old.map((c, i) => c + step[i]), error: () => standardError(band, nX, nY, rows) };
}

/** Where on [−1, 1] the rows lie that hold a value in any group of the sample. */
function seenRows({ ny, nGroup, light }: ColumnSample): number[] {
  const rows: number[] = [];
  for (let y = 0; y < ny; y++) {
    let seen = false;
    for (let g = 0; g < nGroup && !seen; g++) seen = !Number.isNaN(light[(g * ny + y) * groupColumns]);
    if (seen) rows.push(legendreArgument(y, ny));
  }
  return rows;
}

/** From the factors of the normal matrix. ∫ P_a² over the columns is 1/(2a + 1) of their number, and different terms in x are
 * orthogonal; over the rows the surface is asked for where it is needed. */
function standardError(factors: Float64Array, nX: number, nY: number, rows: number[]): number {
  const n = nX * nY;
  const inverse = inverseBand(factors, n, n - 1);
  const overlap = new Float64Array(nY * nY);
  for (const t of rows) {
    const p = legendreBasis(t, nY);
    for (let j = 0; j < nY; j++) for (let l = 0; l <= j; l++) overlap[j * nY + l] += (p[j] * p[l]) / rows.length;
  }
  let variance = 0;
  for (let a = 0; a < nX; a++) {
    for (let j = 0; j < nY; j++) {
      for (let l = 0; l <= j; l++) {
        const covariance = inverse[(a * nY + j) * n + j - l];
        variance += ((j === l ? 1 : 2) * covariance * overlap[j * nY + l]) / (2 * a + 1);
      }
    }
  }
  return variance > 0 ? Math.sqrt(variance) : Number.POSITIVE_INFINITY;
}
