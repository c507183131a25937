/** A profile of any form, as a table: one cumulative shape, stretched by each fibre's own width, with terms that let it
 * change smoothly over the detector.
 *
 *     weight of pixel i = C(v₊) − C(v₋),   v = (edge − centre) · referenceWidth / width + Σ_m T_m centroid_m
 *     C(v) = Σ_m T_m C_m(v)
 *     T = 1, x, P₂(x), y, P₂(y), x·y (x, y ∈ [−1, 1] over the frame), and the fibre's relative width / 5 %
 *
 * C_0 runs from 0 to 1, the others return to 0: the whole profile, wings included, holds 1. Between the table's points
 * C follows the cubic that has its values and slopes there (Hermite). */

export const nShapeTerm = 7;
/** Departure of a fibre's width from the reference that makes the last term 1. */
const widthUnit = 0.05;

export interface ShapeTable {
  /** v of the first point, and distance of points; pixels at the reference width. */
  start: number;
  step: number;
  n: number;
  /** n × 2·nShapeTerm: C_0 … C_6, then their slopes. */
  values: Float64Array;
  /** σ, pixels. */
  referenceWidth: number;
  /** nShapeTerm: v of the centroid for each term, so that tramlines run along the centroid of the whole profile. */
  centroid: Float64Array;
}

/** T_0 … T_6 of a fibre of `width` pixels at x, y ∈ [−1, 1]. */
export function shapeTerms(x: number, y: number, width: number, referenceWidth: number): Float64Array {
  return Float64Array.of(
    1,
    x,
    1.5 * x * x - 0.5,
    y,
    1.5 * y * y - 0.5,
    x * y,
    (width / referenceWidth - 1) / widthUnit,
  );
}

/** C(v) and its slope c(v) for the terms T: [value, slope]. */
export function shapeAt(table: ShapeTable, terms: Float64Array, v: number, out: Float64Array): void {
  const at = (v - table.start) * (1 / table.step);
  const cell = Math.min(Math.max(Math.floor(at), 0), table.n - 2);
  const t = Math.min(Math.max(at - cell, 0), 1);
  const row = cell * 2 * nShapeTerm;
  const c0 = sumOfTerms(table.values, row, terms);
  const d0 = sumOfTerms(table.values, row + nShapeTerm, terms);
  const c1 = sumOfTerms(table.values, row + 2 * nShapeTerm, terms);
  const d1 = sumOfTerms(table.values, row + 3 * nShapeTerm, terms);
  const u = 1 - t;
  const rise = (c1 - c0) / table.step;
  out[0] = c0 + t * t * (3 - 2 * t) * (c1 - c0) + table.step * t * u * (u * d0 - t * d1);
  out[1] = 6 * t * u * rise + u * (1 - 3 * t) * d0 + t * (3 * t - 2) * d1;
}

/** Light of the profile on pixels `first` … `first + n − 1`. Unit-free, [n]. */
export function shapeWeights(
  table: ShapeTable,
  terms: Float64Array,
  centre: number,
  width: number,
  first: number,
  n: number,
): Float64Array {
  const scale = table.referenceWidth / width;
  const origin = centroidOf(table, terms);
  const weights = new Float64Array(n);
  const edge = new Float64Array(2);
  shapeAt(table, terms, (first - 0.5 - centre) * scale + origin, edge);
  for (let i = 0; i < n; i++) {
    const below = edge[0];
    shapeAt(table, terms, (first + i + 0.5 - centre) * scale + origin, edge);
    weights[i] = edge[0] - below;
  }
  return weights;
}

/** v of the profile's centroid. */
export function centroidOf(table: ShapeTable, terms: Float64Array): number {
  return sumOfTerms(table.centroid, 0, terms);
}

/** Σ T_m a_m of the seven numbers from `at` on, in the order of the kernel, for which x is one number: terms in x first. */
function sumOfTerms(a: Float64Array, at: number, [, x, bentX, y, bentY, , wide]: Float64Array): number {
  const inX = a[at] + x * a[at + 1] + bentX * a[at + 2];
  const inY = a[at + 3] + x * a[at + 5];
  return inX + y * inY + bentY * a[at + 4] + wide * a[at + 6];
}
