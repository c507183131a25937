/** Cubic B-splines on knots of any spacing, and least squares with them (de Boor, A Practical Guide to Splines, 1978).
 *
 *     s(x) = Σ_j c_j B_j(x),    (Σ w B Bᵀ) c = Σ w B y
 *
 * Four functions overlap at any x, so the normal equations are banded, and the band of their inverse is the covariance of
 * neighbouring coefficients. A wider reach than the three of the equations themselves is kept, so that values a few
 * knots apart have their covariance too; beyond it they are taken for uncorrelated. */
import { factorBand, inverseBand, solveBand } from "../reference/banded.js";

/** Functions that overlap, less one; also the degree. */
const DEGREE = 3;
/** Coefficients further apart than this count as uncorrelated. */
const REACH = 8;
const ROW = REACH + 1;

export interface BSpline {
  /** Rising; the ends fourfold. */
  knots: Float64Array;
  /** knots.length − 4; NaN where no sample told. */
  coef: Float64Array;
}

export interface FittedSpline extends BSpline {
  /** Covariance of coefficients i and i − j: [nCoef × 9] at i·9 + j. True when every weight is an inverse variance. */
  covariance: Float64Array;
}

/** Sums over samples, for as many of them as one likes to add or take off. */
export interface SplineNormal {
  knots: Float64Array;
  band: Float64Array;
  rhs: Float64Array;
}

/** Breaks, rising, with the ends fourfold. */
export function clampedKnots(breaks: ArrayLike<number>): Float64Array {
  const knots = new Float64Array(breaks.length + 2 * DEGREE);
  knots.fill(breaks[0], 0, DEGREE);
  for (let i = 0; i < breaks.length; i++) knots[DEGREE + i] = breaks[i];
  knots.fill(breaks[breaks.length - 1], DEGREE + breaks.length);
  return knots;
}

/** The four functions that are not 0 at x (de Boor's recurrence), into `values` [4]. Returns the index of the first, or −1
 * beyond the ends. */
export function splineBasis(knots: Float64Array, x: number, values: Float64Array): number {
  const last = knots.length - DEGREE - 2;
  if (!(x >= knots[DEGREE] && x <= knots[last + 1])) return -1;
  let low = DEGREE;
  let high = last;
  while (low < high) {
    const middle = (low + high + 1) >> 1;
    if (knots[middle] <= x) low = middle;
    else high = middle - 1;
  }
  values[0] = 1;
  for (let d = 1; d <= DEGREE; d++) {
    let carried = 0;
    for (let r = 0; r < d; r++) {
      const right = knots[low + r + 1];
      const left = knots[low + 1 - d + r];
      const share = values[r] / (right - left);
      values[r] = carried + (right - x) * share;
      carried = (x - left) * share;
    }
    values[d] = carried;
  }
  return low - DEGREE;
}

export function emptyNormal(knots: Float64Array): SplineNormal {
  const n = knots.length - DEGREE - 1;
  return { knots, band: new Float64Array(n * ROW), rhs: new Float64Array(n) };
}

/** Adds samples [n] to the sums; those with weight 0, or beyond the ends, count for nothing. */
export function addSamples(
  normal: SplineNormal,
  x: ArrayLike<number>,
  y: ArrayLike<number>,
  weight: ArrayLike<number>,
): void {
  const values = new Float64Array(DEGREE + 1);
  const { knots, band, rhs } = normal;
  for (let i = 0; i < x.length; i++) {
    if (!(weight[i] > 0)) continue;
    const first = splineBasis(knots, x[i], values);
    if (first < 0) continue;
    for (let a = 0; a <= DEGREE; a++) {
      const share = weight[i] * values[a];
      rhs[first + a] += share * y[i];
      for (let b = 0; b <= a; b++) band[(first + a) * ROW + a - b] += share * values[b];
    }
  }
}

/** `sign` · b on top of a. Both on the same knots. */
export function addNormal(a: SplineNormal, b: SplineNormal, sign = 1): void {
  for (let i = 0; i < a.band.length; i++) a.band[i] += sign * b.band[i];
  for (let i = 0; i < a.rhs.length; i++) a.rhs[i] += sign * b.rhs[i];
}

/** The spline that the sums ask for; they stay as they are. */
export function solveNormal({ knots, band, rhs }: SplineNormal): FittedSpline {
  const n = rhs.length;
  const factors = band.slice();
  const coef = rhs.slice();
  factorBand(factors, n, REACH);
  solveBand(factors, n, REACH, coef);
  const covariance = inverseBand(factors, n, REACH);
  // A function that no sample reached: 0 would be a value, and there is none.
  for (let i = 0; i < n; i++) if (factors[i * ROW] === 0) coef[i] = Number.NaN;
  return { knots, coef, covariance };
}

/** Weighted least squares through samples [n]. */
export function fitSpline(
  knots: Float64Array,
  x: ArrayLike<number>,
  y: ArrayLike<number>,
  weight: ArrayLike<number>,
): FittedSpline {
  const normal = emptyNormal(knots);
  addSamples(normal, x, y, weight);
  return solveNormal(normal);
}

/** s(x) for every x [n]; NaN beyond the ends. */
export function splineValues({ knots, coef }: BSpline, x: ArrayLike<number>): Float64Array {
  const values = new Float64Array(DEGREE + 1);
  return Float64Array.from({ length: x.length }, (_, i) => {
    const first = splineBasis(knots, x[i], values);
    if (first < 0) return Number.NaN;
    let sum = 0;
    for (let a = 0; a <= DEGREE; a++) sum += values[a] * coef[first + a];
    return sum;
  });
}

/** Covariance of s(xa_i) with s(xb_i), [n]; their variance when both are the same. NaN beyond the ends. */
export function splineCovariances(fit: FittedSpline, xa: ArrayLike<number>, xb: ArrayLike<number>): Float64Array {
  const [a, b] = [new Float64Array(DEGREE + 1), new Float64Array(DEGREE + 1)];
  return Float64Array.from({ length: xa.length }, (_, i) => {
    const firstA = splineBasis(fit.knots, xa[i], a);
    const firstB = splineBasis(fit.knots, xb[i], b);
    return firstA < 0 || firstB < 0 ? Number.NaN : bilinear(fit, firstA, a, firstB, b);
  });
}

function bilinear(
  { covariance, coef }: FittedSpline,
  firstA: number,
  a: Float64Array,
  firstB: number,
  b: Float64Array,
) {
  let sum = 0;
  for (let i = 0; i <= DEGREE; i++) {
    for (let j = 0; j <= DEGREE; j++) {
      const [p, q] = [firstA + i, firstB + j];
      if (Number.isNaN(coef[p]) || Number.isNaN(coef[q])) return Number.NaN;
      const apart = Math.abs(p - q);
      if (apart <= REACH) sum += a[i] * b[j] * covariance[Math.max(p, q) * ROW + apart];
    }
  }
  return sum;
}

/** Distance of the two knots about each x [n]; NaN beyond the ends. */
export function cellWidths({ knots }: BSpline, x: ArrayLike<number>): Float64Array {
  const values = new Float64Array(DEGREE + 1);
  return Float64Array.from({ length: x.length }, (_, i) => {
    const first = splineBasis(knots, x[i], values);
    return first < 0 ? Number.NaN : knots[first + DEGREE + 1] - knots[first + DEGREE];
  });
}
