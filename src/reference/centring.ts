/** Joint linearised centring of all fibres in a column. Light near fibre k, whose centre is thought at y_k with width
 * σ_k, is modelled as
 *
 *     a P(y − y_k) + u ∂P/∂y_k + s ∂P/∂σ_k,      u = a·δ (shift),  s = a·δσ (widening; only when nPar = 3)
 *
 * over a background Σ b_q P_q, Legendre in the row. P is the Gaussian integrated over pixels. Weighted least squares;
 * light of fibres more than `neighbours` places apart is taken as not overlapping. */
import { factorBand, inverseBand, solveBand } from "./banded.js";
import { erf } from "./erf.js";
import { legendreArgument, legendreBasis } from "./legendre.js";

export interface CentringProblem {
  /** nRow */
  data: ArrayLike<number>;
  /** nRow: inverse variance, 0 for a pixel left out. */
  weight: ArrayLike<number>;
  /** nFibre, ascending: where the centres are thought to be, pixels. */
  centre: ArrayLike<number>;
  /** nFibre: σ, pixels. */
  sigma: ArrayLike<number>;
}

export interface CentringShape {
  /** 2: light and shift; 3: light, shift and width. */
  nPar: 2 | 3;
  neighbours: number;
  /** A fibre's light ends this far from its centre, pixels. */
  reach: number;
  /** Legendre terms of the background. */
  nBack: number;
}

export interface CentringSolution {
  /** nFibre × nPar: a, u = a·δ (, s = a·δσ). */
  solution: Float64Array;
  /** nFibre × nPar: their variances for a known background. */
  variance: Float64Array;
  /** nRow: the linear model, background included. */
  model: Float64Array;
  /** nBack */
  background: Float64Array;
}

export function centreFibres(problem: CentringProblem, shape: CentringShape): CentringSolution {
  const { data, weight } = problem;
  const { nPar, neighbours, nBack } = shape;
  const nRow = data.length;
  const fibres = designColumns(problem, shape, nRow);
  const rows = Array.from({ length: nRow }, (_, y) => legendreBasis(legendreArgument(y, nRow), nBack));
  const smooth = Array.from({ length: nBack }, (_, q) => rows.map((row) => row[q]));
  const dot = (p: ArrayLike<number>, r: ArrayLike<number>) => {
    let sum = 0;
    for (let y = 0; y < nRow; y++) sum += weight[y] * p[y] * r[y];
    return sum;
  };

  const n = fibres.length;
  const b = nPar * (neighbours + 1) - 1;
  const band = new Float64Array(n * (b + 1));
  for (let i = 0; i < n; i++) {
    for (let j = 0; j <= i; j++) {
      const apart = Math.floor(i / nPar) - Math.floor(j / nPar);
      if (apart <= neighbours) band[i * (b + 1) + i - j] = dot(fibres[i], fibres[j]);
    }
  }
  factorBand(band, n, b);
  const inverse = inverseBand(band, n, b);
  const x = Float64Array.from(fibres, (column) => dot(column, data));
  solveBand(band, n, b, x);

  // The border: M x + C b = r and Cᵀ x + S b = t give (S − Cᵀ M⁻¹ C) b = t − Cᵀ M⁻¹ r.
  const border = smooth.map((column) => fibres.map((fibre) => dot(fibre, column)));
  const solved = border.map((column) => {
    const z = Float64Array.from(column);
    solveBand(band, n, b, z);
    return z;
  });
  const plainDot = (p: ArrayLike<number>, r: ArrayLike<number>) =>
    Array.from(p).reduce((sum, v, i) => sum + v * r[i], 0);
  const equations = smooth.map((column, q) => [
    ...smooth.map((other, r) => dot(column, other) - plainDot(border[q], solved[r])),
    dot(column, data) - plainDot(border[q], x),
  ]);
  const background = solveDense(equations);
  const solution = x.map((value, i) => solved.reduce((sum, z, q) => sum - z[i] * background[q], value));

  const model = new Float64Array(nRow);
  for (let y = 0; y < nRow; y++) {
    model[y] = plainDot(rows[y], background);
    for (let i = 0; i < n; i++) model[y] += solution[i] * fibres[i][y];
  }
  return { solution, variance: Float64Array.from({ length: n }, (_, i) => inverse[i * (b + 1)]), model, background };
}

/** P, ∂P/∂y_k (, ∂P/∂σ_k) of each fibre on every row. */
function designColumns(problem: CentringProblem, shape: CentringShape, nRow: number): Float64Array[] {
  return Array.from(problem.centre).flatMap((centre, k) => {
    const sigma = problem.sigma[k];
    const columns = Array.from({ length: shape.nPar }, () => new Float64Array(nRow));
    for (let y = 0; y < nRow; y++) {
      if (Math.abs(y - centre) > shape.reach) continue;
      const low = y - 0.5 - centre;
      const high = y + 0.5 - centre;
      columns[0][y] = 0.5 * (erf(high / sigma / Math.SQRT2) - erf(low / sigma / Math.SQRT2));
      columns[1][y] = density(low, sigma) - density(high, sigma);
      if (shape.nPar === 3) columns[2][y] = (low * density(low, sigma) - high * density(high, sigma)) / sigma;
    }
    return columns;
  });
}

function density(distance: number, sigma: number): number {
  return Math.exp(-0.5 * (distance / sigma) ** 2) / (sigma * Math.sqrt(2 * Math.PI));
}

/** Gauss elimination of a small positive system, rows [… | rhs]; a lost pivot drops its unknown. */
function solveDense(rows: number[][]): Float64Array {
  const n = rows.length;
  for (let i = 0; i < n; i++) {
    for (let j = i + 1; j < n; j++) {
      const factor = rows[i][i] > 0 ? rows[j][i] / rows[i][i] : 0;
      for (let k = i; k <= n; k++) rows[j][k] -= factor * rows[i][k];
    }
  }
  const x = new Float64Array(n);
  for (let i = n - 1; i >= 0; i--) {
    let sum = rows[i][n];
    for (let k = i + 1; k < n; k++) sum -= rows[i][k] * x[k];
    x[i] = rows[i][i] > 0 ? sum / rows[i][i] : 0;
  }
  return x;
}
