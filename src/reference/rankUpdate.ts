/** N ± Σ g gᵀ over rows g: the normal matrix of a least-squares problem with design rows g. */

/** `g`: nRow × n; `normal`: n × n, to whose lower triangle (column ≤ row) sign · Σ g gᵀ is added. */
export function rankUpdate(g: Float64Array, nRow: number, n: number, sign: number, normal: Float64Array): void {
  for (let i = 0; i < nRow; i++) {
    for (let r = 0; r < n; r++) {
      for (let c = 0; c <= r; c++) normal[r * n + c] += sign * g[i * n + r] * g[i * n + c];
    }
  }
}
