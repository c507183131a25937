/** Joint linearised centring of all fibres in a column, weighted by the variance of its own model. Light near fibre k, whose centre is thought at y_k with width
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

/** A column to be centred, all [nRow]. */
export interface CentringColumn {
  /** e⁻; anything where it is not good. */
  data: ArrayLike<number>;
  /** 1, or 0 for a pixel left out. */
  good: ArrayLike<number>;
  /** e⁻²: variance without light. */
  fixedVariance: ArrayLike<number>;
  /** e⁻² per e⁻ of light. */
  variancePerElectron: ArrayLike<number>;
}

export type CentringGuess = Pick<CentringProblem, "centre" | "sigma">;

export interface CentringRounds {
  /** 2: light and shift; 3: light, shift and width. */
  nPar: 2 | 3;
  /** Solutions, each weighted by the variance of the model before it; the first of all by that of the data. */
  nRound: number;
  /** Pixels farther than this from every centre do not count. */
  near: number;
  /** The profile's own relative error: a share of the light that adds to its noise. */
  relativeError: number;
  /** Pixels this many σ off the model are left out before the last round, and from there on; 0: none. */
  kappa: number;
  /** … σ with this for the profile's error. */
  rejectError: number;
}

export interface CentringShape {
  /** Fibres at most this many places apart overlap. */
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

/** Rounds of `centreFibres`, starting from `model` [nRow]; what is left out becomes 0 in `good`. */
export function centreColumn(
  column: CentringColumn,
  good: Uint8Array,
  guess: CentringGuess,
  model: ArrayLike<number>,
  shape: CentringShape,
  rounds: CentringRounds,
): CentringSolution {
  const { data, fixedVariance, variancePerElectron } = column;
  const variance = (y: number, m: number, relativeError: number) =>
    fixedVariance[y] + variancePerElectron[y] * Math.max(0, m) + (relativeError * Math.max(0, m)) ** 2;
  const rows = Array.from({ length: data.length }, (_, y) => y);
  const isNear = rows.map((y) => Array.from(guess.centre).some((centre) => Math.abs(y - centre) <= rounds.near));
  let before = model;
  let solution: CentringSolution | undefined;
  for (let round = 1; round <= rounds.nRound; round++) {
    const m = (y: number) => before[y] ?? 0;
    if (round === rounds.nRound && rounds.kappa > 0) {
      for (const y of rows) {
        // What stands next to bright pixels may stray by a share of those.
        const beside = Math.max(m(y), 0.5 * m(y - 1), 0.5 * m(y + 1));
        const limit = rounds.kappa ** 2 * variance(y, beside, rounds.rejectError);
        if ((data[y] - m(y)) ** 2 > limit) good[y] = 0;
      }
    }
    const weight = rows.map((y) => (good[y] === 1 && isNear[y] ? 1 / variance(y, m(y), rounds.relativeError) : 0));
    solution = centreFibres({ data, weight, ...guess }, shape, rounds.nPar);
    before = solution.model;
  }
  return solution!;
}

/** One solution with the weights given. */
export function centreFibres(problem: CentringProblem, shape: CentringShape, nPar: 2 | 3): CentringSolution {
  const { data, weight } = problem;
  const { neighbours, nBack } = shape;
  const nRow = data.length;
  const fibres = designColumns(problem, shape, nPar, nRow);
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
function designColumns(problem: CentringProblem, shape: CentringShape, nPar: 2 | 3, nRow: number): Float64Array[] {
  return Array.from(problem.centre).flatMap((centre, k) => {
    const sigma = problem.sigma[k];
    const columns = Array.from({ length: nPar }, () => new Float64Array(nRow));
    for (let y = 0; y < nRow; y++) {
      if (Math.abs(y - centre) > shape.reach) continue;
      const low = y - 0.5 - centre;
      const high = y + 0.5 - centre;
      columns[0][y] = 0.5 * (erf(high / sigma / Math.SQRT2) - erf(low / sigma / Math.SQRT2));
      columns[1][y] = density(low, sigma) - density(high, sigma);
      if (nPar === 3) columns[2][y] = (low * density(low, sigma) - high * density(high, sigma)) / sigma;
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
