/** N += Σ_i w_i g_i g_iᵀ: the normal matrix of a least-squares problem with design rows g_i and weights w_i. */

/** `g`: nRow × n; `weights`: nRow; `normal`: n × n, of which the lower triangle (column ≤ row) is kept up. */
export function rankUpdate(
  g: Float64Array,
  weights: Float64Array,
  nRow: number,
  n: number,
  normal: Float64Array,
): void {
  for (let i = 0; i < nRow; i++) {
    for (let r = 0; r < n; r++) {
      const a = weights[i] * g[i * n + r];
      for (let c = 0; c <= r; c++) normal[r * n + c] += a * g[i * n + c];
    }
  }
}
