/** The functions that a shape is made of: cubic B-splines on knots that stand close in the core and far apart in the wings,
 * and their integrals (de Boor 1978, A Practical Guide to Splines, chapters IX and X).
 *
 * Few knots in the wings: there fibres' light, their neighbours' and the scattered light are nearly alike, and a spline
 * that could follow each would share them out at random. */
import { nShapeTerm, type ShapeTable } from "../../reference/shape.js";
import type { ShapeBasis } from "../../reference/shapeBasis.js";

/** Positive knots, pixels at a width of `knotWidth`; the negative ones mirror them. */
const knots = [0, 0.4, 0.8, 1.2, 1.6, 2, 2.4, 2.8, 3.2, 3.6, 4.3, 5.2, 6.4, 8, 10.2, 13, 16.5, 20.5];
const knotWidth = 1.04;
/** Points of the table per pixel at `knotWidth`. */
const pointsPerPixel = 32;
const order = 4;
export const nSpline = 2 * knots.length - 1 - order;
/** Terms beyond the first may reach these shares of it: in the core, and in the wings, which hardly change.
 * Distance in pixels at `knotWidth`. */
const coreShare = 0.2;
const wingShare = 0.05;
const wingBegins = 4.2;

/** `referenceWidth`: σ of the profile, pixels; the knots scale with it. */
export function shapeBasis(referenceWidth: number): ShapeBasis {
  const mirrored = [
    ...knots
      .slice(1)
      .reverse()
      .map((x) => -x),
    ...knots,
  ];
  const last = mirrored[mirrored.length - 1];
  const scale = referenceWidth / knotWidth;
  const extended = [...mirrored, last + 1, last + 2, last + 3, last + 4, last + 5];
  const n = 2 * last * pointsPerPixel + 1;
  const basis = {
    nSpline,
    start: -last * scale,
    step: scale / pointsPerPixel,
    n,
    values: new Float64Array(n * 2 * nSpline),
    whole: Float64Array.from({ length: nSpline }, (_, j) => ((mirrored[j + order] - mirrored[j]) / order) * scale),
    priorShare: Float64Array.from({ length: nSpline }, (_, j) =>
      Math.abs(mirrored[j + order / 2]) > wingBegins ? wingShare : coreShare,
    ),
    priorSpread: new Float64Array(nSpline).fill(wingShare * 1e-6),
    canMove: true,
    referenceWidth,
  };
  for (let i = 0; i < n; i++) fillPoint(basis, extended, i);
  return { ...basis, begun: begunSplines(basis) };
}

/** Values by the recurrence of Cox and de Boor; integral of spline j = (t_{j+4} − t_j)/4 · Σ_{i ≥ j} N_{i,5}. */
function fillPoint(basis: Omit<ShapeBasis, "begun">, knots: number[], i: number): void {
  const { nSpline } = basis;
  const v = -knots[nSpline + order - 1] + i / pointsPerPixel;
  let interval = 0;
  while (interval < nSpline + order - 2 && knots[interval + 1] <= v) interval++;
  const cubic = splinesOfOrder(knots, interval, v, order);
  const quartic = splinesOfOrder(knots, interval, v, order + 1);
  const row = i * 2 * nSpline;
  for (let j = 0; j < nSpline; j++) {
    let above = 0;
    for (let m = Math.max(j, interval - order); m <= interval; m++) above += quartic[m - interval + order] ?? 0;
    const done = j + order <= interval ? 1 : above;
    basis.values[row + j] = done * basis.whole[j];
    basis.values[row + nSpline + j] = cubic[j - interval + order - 1] ?? 0;
  }
}

/** The `k` splines of order k that do not vanish on [t_interval, t_interval+1): N_{interval−k+1} … N_interval at v. */
function splinesOfOrder(knots: number[], interval: number, v: number, k: number): number[] {
  let row = [1];
  for (let order = 2; order <= k; order++) {
    const next = new Array<number>(order).fill(0);
    for (let r = 0; r < row.length; r++) {
      const left = knots[interval - order + 2 + r] ?? knots[0] - (order - 2 - interval - r);
      const right = knots[interval + 1 + r];
      const width = right - left;
      next[r] += ((right - v) / width) * row[r];
      next[r + 1] += ((v - left) / width) * row[r];
    }
    row = next;
  }
  return row;
}

/** The table of a shape with coefficients c: [nSpline × nShapeTerm]. */
export function tabulate(basis: ShapeBasis, c: Float64Array): ShapeTable {
  const { n, nSpline } = basis;
  const values = new Float64Array(n * 2 * nShapeTerm);
  for (let i = 0; i < n; i++) {
    for (let m = 0; m < nShapeTerm; m++) {
      let [integral, slope] = [0, 0];
      for (let j = 0; j < nSpline; j++) {
        integral += c[j * nShapeTerm + m] * basis.values[i * 2 * nSpline + j];
        slope += c[j * nShapeTerm + m] * basis.values[i * 2 * nSpline + nSpline + j];
      }
      values[i * 2 * nShapeTerm + m] = integral;
      values[i * 2 * nShapeTerm + nShapeTerm + m] = slope;
    }
  }
  const centroid = new Float64Array(nShapeTerm);
  return { start: basis.start, step: basis.step, n, values, referenceWidth: basis.referenceWidth, centroid };
}

/** For each cell of the table, the first spline that is not yet whole and the last that has begun: [2 · (n − 1)]. */
export function begunSplines({ n, nSpline, values, whole }: Omit<ShapeBasis, "begun">): Int32Array {
  const begun = new Int32Array(2 * (n - 1));
  for (let cell = 0; cell < n - 1; cell++) {
    let first = 0;
    while (first < nSpline - 1 && values[cell * 2 * nSpline + first] === whole[first]) first++;
    let last = nSpline - 1;
    while (last > 0 && values[(cell + 1) * 2 * nSpline + last] === 0) last--;
    begun[2 * cell] = Math.min(first, last);
    begun[2 * cell + 1] = Math.max(first, last);
  }
  return begun;
}
