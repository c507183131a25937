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
  const low = cellOf(knots, x, -1);
  if (low < 0) return -1;
  fillBasis(knots, low, x, values, 0);
  return low - DEGREE;
}

/** The four functions that are not 0 at each of n samples: worth keeping where several fits have the same knots. */
export interface SplineBases {
  knots: Float64Array;
  /** n: index of the first of the four, −1 beyond the ends. */
  first: Int32Array;
  /** n × 4. */
  values: Float64Array;
}

export function splineBases(knots: Float64Array, x: ArrayLike<number>): SplineBases {
  const first = new Int32Array(x.length);
  const values = new Float64Array(x.length * (DEGREE + 1));
  let low = -1;
  for (let i = 0; i < x.length; i++) {
    low = cellOf(knots, x[i], low);
    first[i] = low < 0 ? -1 : low - DEGREE;
    if (low >= 0) fillBasis(knots, low, x[i], values, i * (DEGREE + 1));
  }
  return { knots, first, values };
}

/** The last knot that is not above x and begins a cell, −1 beyond the ends; looked for at `near` and beside it first, since samples
 * mostly come in order. */
function cellOf(knots: Float64Array, x: number, near: number): number {
  const last = knots.length - DEGREE - 2;
  if (!(x >= knots[DEGREE] && x <= knots[last + 1])) return -1;
  if (near >= 0) {
    const to = Math.min(last, near + 1);
    for (let cell = Math.max(DEGREE, near - 1); cell <= to; cell++) {
      if (knots[cell] <= x && (cell === last || x < knots[cell + 1])) return cell;
    }
  }
  let low = DEGREE;
  let high = last;
  while (low < high) {
    const middle = (low + high + 1) >> 1;
    if (knots[middle] <= x) low = middle;
    else high = middle - 1;
  }
  return low;
}

/** From degree to degree: B_r → B_r (x − t_r)/(t_{r+d} − t_r) + B_{r+1} (t_{r+d+1} − x)/(t_{r+d+1} − t_{r+1}). */
function fillBasis(knots: Float64Array, low: number, x: number, values: Float64Array, at: number): void {
  const [left3, left2, left1] = [knots[low - 2], knots[low - 1], knots[low]];
  const [right1, right2, right3] = [knots[low + 1], knots[low + 2], knots[low + 3]];
  let share = 1 / (right1 - left1);
  const line0 = (right1 - x) * share;
  const line1 = (x - left1) * share;
  share = line0 / (right1 - left2);
  const square0 = (right1 - x) * share;
  let carried = (x - left2) * share;
  share = line1 / (right2 - left1);
  const square1 = carried + (right2 - x) * share;
  const square2 = (x - left1) * share;
  share = square0 / (right1 - left3);
  values[at] = (right1 - x) * share;
  carried = (x - left3) * share;
  share = square1 / (right2 - left2);
  values[at + 1] = carried + (right2 - x) * share;
  carried = (x - left2) * share;
  share = square2 / (right3 - left1);
  values[at + 2] = carried + (right3 - x) * share;
  values[at + 3] = (x - left1) * share;
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
  addOnBases(normal, splineBases(normal.knots, x), y, weight);
}

function addOnBases(
  { band, rhs }: SplineNormal,
  { first, values }: SplineBases,
  y: ArrayLike<number>,
  weight: ArrayLike<number>,
): void {
  for (let i = 0; i < first.length; i++) {
    const from = first[i];
    if (from < 0 || !(weight[i] > 0)) continue;
    const at = i * (DEGREE + 1);
    for (let a = 0; a <= DEGREE; a++) {
      const share = weight[i] * values[at + a];
      rhs[from + a] += share * y[i];
      const diagonal = (from + a) * ROW + a;
      for (let b = 0; b <= a; b++) band[diagonal - b] += share * values[at + b];
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
  // A function that no sample reached: 0 would be a value, and there is none.
  for (let i = 0; i < n; i++) if (factors[i * ROW] === 0) coef[i] = Number.NaN;
  let covariance: Float64Array | undefined;
  return {
    knots,
    coef,
    // Fits on the way to another are not asked for it.
    get covariance() {
      covariance ??= inverseBand(factors, n, REACH);
      return covariance;
    },
  };
}

/** Weighted least squares through samples [n]. */
export function fitSpline(
  knots: Float64Array,
  x: ArrayLike<number>,
  y: ArrayLike<number>,
  weight: ArrayLike<number>,
): FittedSpline {
  return fitOnBases(splineBases(knots, x), y, weight);
}

/** The same where the samples' functions are known. */
export function fitOnBases(bases: SplineBases, y: ArrayLike<number>, weight: ArrayLike<number>): FittedSpline {
  const normal = emptyNormal(bases.knots);
  addOnBases(normal, bases, y, weight);
  return solveNormal(normal);
}

/** s(x) for every x [n]; NaN beyond the ends. */
export function splineValues({ knots, coef }: BSpline, x: ArrayLike<number>): Float64Array {
  return valuesOnBases(splineBases(knots, x), coef);
}

/** The same where the samples' functions are known. */
export function valuesOnBases({ first, values }: SplineBases, coef: Float64Array): Float64Array {
  const out = new Float64Array(first.length);
  for (let i = 0; i < out.length; i++) {
    const from = first[i];
    if (from < 0) {
      out[i] = Number.NaN;
      continue;
    }
    let sum = 0;
    for (let a = 0; a <= DEGREE; a++) sum += values[i * (DEGREE + 1) + a] * coef[from + a];
    out[i] = sum;
  }
  return out;
}

/** Covariance of s(xa_i) with s(xb_i), [n]; their variance when both are the same. NaN beyond the ends. */
export function splineCovariances(fit: FittedSpline, xa: ArrayLike<number>, xb: ArrayLike<number>): Float64Array {
  const { knots, coef, covariance } = fit;
  const [a, b] = [new Float64Array(DEGREE + 1), new Float64Array(DEGREE + 1)];
  const out = new Float64Array(xa.length);
  for (let i = 0; i < out.length; i++) {
    const firstA = splineBasis(knots, xa[i], a);
    const firstB = splineBasis(knots, xb[i], b);
    out[i] = firstA < 0 || firstB < 0 ? Number.NaN : bilinear(covariance, coef, firstA, a, firstB, b);
  }
  return out;
}

function bilinear(
  covariance: Float64Array,
  coef: Float64Array,
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
  const out = new Float64Array(x.length);
  let low = -1;
  for (let i = 0; i < out.length; i++) {
    low = cellOf(knots, x[i], low);
    out[i] = low < 0 ? Number.NaN : knots[low + 1] - knots[low];
  }
  return out;
}
