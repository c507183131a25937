/** Legendre series: tramlines, widths and backgrounds are sums Σ c_j P_j(t), t ∈ [−1, 1].
 * Recurrence from Abramowitz & Stegun 22.7.10: (j+1) P_{j+1} = (2j+1) t P_j − j P_{j−1}. */

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
