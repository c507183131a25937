/** Weighted least squares by its normal equations, N p = r with N = Σ w a aᵀ and r = Σ w y a: for fits whose rows are mostly
 * zeros and whose unknowns are well scaled (Legendre terms on [−1, 1], shifts in pixels), with prior knowledge of single
 * unknowns as rows of their own.
 *
 * N lies as banded.ts has it, with every row as long as the system: band[i·n + j] = N[i][i−j]. */
import { factorBand, inverseBand, solveBand } from "../reference/banded.js";

export class NormalEquations {
  readonly band: Float64Array;
  readonly right: Float64Array;
  private factored = false;

  constructor(readonly n: number) {
    this.band = new Float64Array(n * n);
    this.right = new Float64Array(n);
  }

  clear(): void {
    this.band.fill(0);
    this.right.fill(0);
    this.factored = false;
  }

  /** A row a whose first `nonzero` entries are values[i] at unknown index[i], indices rising; `y` measured with weight w,
   * its inverse variance. */
  add(index: ArrayLike<number>, values: ArrayLike<number>, nonzero: number, y: number, weight: number): void {
    const { band, right, n } = this;
    for (let i = 0; i < nonzero; i++) {
      const row = index[i];
      const a = weight * values[i];
      right[row] += a * y;
      for (let j = 0; j <= i; j++) band[row * n + row - index[j]] += a * values[j];
    }
  }

  /** Unknown i is `mean`, give or take 1/√weight. */
  addPrior(i: number, mean: number, weight: number): void {
    this.band[i * this.n] += weight;
    this.right[i] += weight * mean;
  }

  /** The unknowns, [n]; one that nothing fixes comes out as 0. The system is spent: only `inverse` may follow. */
  solve(): Float64Array {
    factorBand(this.band, this.n, this.n - 1);
    this.factored = true;
    const solution = this.right.slice();
    solveBand(this.band, this.n, this.n - 1, solution);
    return solution;
  }

  /** Covariance of the unknowns, n × n, both halves. */
  inverse(): Float64Array {
    const { n } = this;
    if (!this.factored) factorBand(this.band, n, n - 1);
    this.factored = true;
    const packed = inverseBand(this.band, n, n - 1);
    const full = new Float64Array(n * n);
    for (let i = 0; i < n; i++) {
      for (let j = 0; j <= i; j++) full[i * n + i - j] = full[(i - j) * n + i] = packed[i * n + j];
    }
    return full;
  }
}
