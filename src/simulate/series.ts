/** Legendre series over the columns of a frame: Σ c_j P_j(t), x ∈ [0, nx − 1] mapped to t ∈ [−1, 1].
 * Recurrence: Abramowitz & Stegun 22.7.10. The forward model keeps its own, so that it shares no code with what it tests. */

export function columnArgument(x: number, nx: number): number {
  return nx > 1 ? (2 * x) / (nx - 1) - 1 : 0;
}

/** The series with coefficients `coef[from … from + nCoef − 1]` at t. */
export function series(coef: ArrayLike<number>, from: number, nCoef: number, t: number): number {
  let sum = 0;
  let before = 0;
  let now = 1;
  for (let j = 0; j < nCoef; j++) {
    sum += coef[from + j] * now;
    const next = ((2 * j + 1) * t * now - j * before) / (j + 1);
    before = now;
    now = next;
  }
  return sum;
}

/** Every row's series on every column: nRow × nx from nRow × nCoef. */
export function seriesOnColumns(coef: Float64Array, nRow: number, nCoef: number, nx: number): Float64Array {
  const out = new Float64Array(nRow * nx);
  for (let row = 0; row < nRow; row++) {
    for (let x = 0; x < nx; x++) out[row * nx + x] = series(coef, row * nCoef, nCoef, columnArgument(x, nx));
  }
  return out;
}
