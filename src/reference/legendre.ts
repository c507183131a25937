/** Legendre series: tramlines, widths and backgrounds are sums Σ c_j P_j(t), t ∈ [−1, 1].
 * Recurrence from Abramowitz & Stegun 22.7.10: (j+1) P_{j+1} = (2j+1) t P_j − j P_{j−1}. */
import { median } from "./median.js";

/** Pixel x of [0, nx − 1] on the series' interval [−1, 1]; a single column sits at 0. */
export function legendreArgument(x: number, nx: number): number {
  return nx > 1 ? (2 * x) / (nx - 1) - 1 : 0;
}

/** Σ_j c_j P_j(t) over `coef[from … from + nCoef − 1]`. Relative error of order nCoef · 2⁻⁵³ for |t| ≤ 1. */
export function legendreValue(coef: ArrayLike<number>, t: number, from = 0, nCoef = coef.length - from): number {
  let below = 1;
  let here = t;
  let sum = coef[from];
  for (let j = 1; j < nCoef; j++) {
    sum += coef[from + j] * here;
    const above = ((2 * j + 1) * t * here - j * below) / (j + 1);
    below = here;
    here = above;
  }
  return sum;
}

/** P_0(t) … P_{nCoef−1}(t). */
export function legendreBasis(t: number, nCoef: number): Float64Array {
  const basis = new Float64Array(nCoef);
  let below = 1;
  let here = t;
  basis[0] = 1;
  for (let j = 1; j < nCoef; j++) {
    basis[j] = here;
    const above = ((2 * j + 1) * t * here - j * below) / (j + 1);
    below = here;
    here = above;
  }
  return basis;
}

/** Weighted least squares for y(t) = Σ c_j P_j(t): Householder's QR of √weight · P_j(t_i) (Golub & Van Loan, §5.2).
 * `t`, `y`, `weight` (≥ 0): [n]. Returns [nCoef]; a coefficient that the points do not fix comes out as 0. */
export function legendreFit(
  t: ArrayLike<number>,
  y: ArrayLike<number>,
  weight: ArrayLike<number>,
  nCoef: number,
): Float64Array {
  const used = Array.from(t, (_, i) => i).filter((i) => weight[i] > 0);
  const rows = used.map((i) => {
    const root = Math.sqrt(weight[i]);
    return [...legendreBasis(t[i], nCoef), y[i]].map((value) => value * root);
  });
  for (let j = 0; j < Math.min(nCoef, rows.length); j++) reflect(rows, j);
  const coef = new Float64Array(nCoef);
  for (let j = nCoef - 1; j >= 0; j--) {
    if (j >= rows.length || Math.abs(rows[j][j]) < 1e-13) continue;
    let sum = rows[j][nCoef];
    for (let k = j + 1; k < nCoef; k++) sum -= rows[j][k] * coef[k];
    coef[j] = sum / rows[j][j];
  }
  return coef;
}

/** Householder reflection that empties column j below the diagonal, applied to the columns from j on. */
function reflect(rows: number[][], j: number): void {
  let norm = 0;
  for (let i = j; i < rows.length; i++) norm += rows[i][j] * rows[i][j];
  if (norm === 0) return;
  const alpha = rows[j][j] > 0 ? -Math.sqrt(norm) : Math.sqrt(norm);
  const v = rows.slice(j).map((row, i) => (i === 0 ? row[j] - alpha : row[j]));
  const vv = v.reduce((sum, value) => sum + value * value, 0);
  for (let k = j; k < rows[j].length; k++) {
    let dot = 0;
    for (let i = 0; i < v.length; i++) dot += v[i] * rows[j + i][k];
    for (let i = 0; i < v.length; i++) rows[j + i][k] -= (2 * dot * v[i]) / vv;
  }
}

/** `legendreFit` with points beyond `kappa` scatters left out in turns; the scatter is 1.4826 × the median of
 * |residual| · √weight over the points in use, so that outliers cannot hide themselves.
 * Returns the coefficients [nCoef] and which points are in use [n, 1 or 0]. */
export function legendreFitClipped(
  t: ArrayLike<number>,
  y: ArrayLike<number>,
  weight: ArrayLike<number>,
  nCoef: number,
  kappa: number,
  maxRounds: number,
): { coef: Float64Array; used: Uint8Array } {
  const all = Array.from(t, (_, i) => i);
  let used = Uint8Array.from(all, (i) => (weight[i] > 0 ? 1 : 0));
  for (let round = 0; ; round++) {
    const kept = all.filter((i) => used[i] === 1);
    const coef = legendreFit(
      t,
      y,
      all.map((i) => used[i] * weight[i]),
      nCoef,
    );
    if (round === maxRounds || kept.length <= nCoef) return { coef, used };
    const scaled = all.map((i) => Math.abs(y[i] - legendreValue(coef, t[i])) * Math.sqrt(weight[i]));
    const limit = kappa * 1.4826 * median(kept.map((i) => scaled[i]));
    const next = Uint8Array.from(all, (i) => (weight[i] > 0 && scaled[i] <= limit ? 1 : 0));
    if (next.every((value, i) => value === used[i])) return { coef, used };
    used = next;
  }
}
