/** Symmetric banded systems: factorisation without square roots (A = L D Lᵀ), solution, and the band of the
 * inverse without the inverse (Takahashi, Fagan & Chen 1973; Golub & Van Loan, Matrix Computations, §4.3).
 *
 *     band[i·(b+1) + j] = M[i][i−j], j = 0 … b
 *     after factorBand:  j = 0: 1/D[i];  j > 0: L[i][i−j]
 *
 * A pivot that is 0, or below `smallestPivotShare` of what it is the difference of, drops its unknown: 1/D = 0, so
 * that the unknown and its variance come out as exactly 0, and the others as if it were not there. */

/** A pivot below this share of its terms (diagonal and what is taken from it, without signs) carries no digit. */
const smallestPivotShare = 1e-8;

/** M = L D Lᵀ in place. `band`: [n × (b+1)]. */
export function factorBand(band: Float64Array, n: number, b: number): void {
  const row = b + 1;
  for (let i = 0; i < n; i++) {
    const reach = Math.min(i, b);
    for (let j = reach; j >= 1; j--) {
      for (let m = j + 1; m <= reach; m++) {
        band[i * row + j] -= band[i * row + m] * band[(i - j) * row + m - j];
      }
    }
    let pivot = band[i * row];
    let size = Math.abs(pivot);
    for (let j = 1; j <= reach; j++) {
      const u = band[i * row + j];
      band[i * row + j] = u * band[(i - j) * row];
      const taken = u * band[i * row + j];
      pivot -= taken;
      size += Math.abs(taken);
    }
    band[i * row] = Math.abs(pivot) > smallestPivotShare * size ? 1 / pivot : 0;
  }
}

/** Solves M x = r in place of `rhs` [n], with the factors of `factorBand`. */
export function solveBand(band: Float64Array, n: number, b: number, rhs: Float64Array): void {
  const row = b + 1;
  for (let i = 0; i < n; i++) {
    for (let j = 1; j <= Math.min(i, b); j++) rhs[i] -= band[i * row + j] * rhs[i - j];
  }
  for (let i = n - 1; i >= 0; i--) {
    rhs[i] *= band[i * row];
    for (let j = 1; j <= Math.min(n - 1 - i, b); j++) rhs[i] -= band[(i + j) * row + j] * rhs[i + j];
  }
}

/** The band of M⁻¹, [n × (b+1)], from the factors of `factorBand`. */
export function inverseBand(band: Float64Array, n: number, b: number): Float64Array {
  const row = b + 1;
  const inverse = new Float64Array(n * row);
  for (let i = n - 1; i >= 0; i--) {
    const reach = Math.min(n - 1 - i, b);
    for (let j = reach; j >= 0; j--) {
      let sum = j === 0 ? band[i * row] : 0;
      for (let k = 1; k <= reach; k++) {
        const low = Math.max(k, j);
        sum -= band[(i + k) * row + k] * inverse[(i + low) * row + low - Math.min(k, j)];
      }
      inverse[(i + j) * row + j] = sum;
    }
  }
  return inverse;
}
