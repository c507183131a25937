/** What keeps a profile step in its bounds: priors on how far a shape may change over the detector, and gauges for what belongs to
 * the fibres and not to their shape. Normal matrices are n × n, a spline's terms after another; column ≤ row counts. */
import { nShapeTerm, type ShapeTable } from "../../reference/shape.js";
import type { ShapeBasis } from "../../reference/shapeBasis.js";

/** By how much a frame's focus may differ from the flat's, relative: prior where widths are the shape's. */
const widening = 0.05;

/** Terms beyond the first stay near 0; coefficients `c`: [nSpline × nShapeTerm]. */
export function addPriors(
  normal: Float64Array,
  rhs: Float64Array,
  n: number,
  basis: ShapeBasis,
  c: Float64Array,
): void {
  for (let j = 0; j < basis.nSpline; j++) {
    const sigma = Math.max(basis.priorShare[j] * Math.abs(c[j * nShapeTerm]), basis.priorSpread[j]);
    for (let m = 1; m < nShapeTerm; m++) {
      const i = j * nShapeTerm + m;
      normal[i * n + i] += 1 / (sigma * sigma);
      rhs[i] -= c[i] / (sigma * sigma);
    }
  }
}

/** Keeps a step from changing the norm, from shifting the shape and, where widths follow, from widening it. */
export function addGauges(
  normal: Float64Array,
  n: number,
  basis: ShapeBasis,
  table: ShapeTable,
  widthsFollow: boolean,
): void {
  const [shift, width] = shiftAndWidth(basis, table);
  const gauges = [basis.whole, ...(basis.canMove ? [shift] : []), ...(basis.canMove && widthsFollow ? [width] : [])];
  for (let m = 0; m < nShapeTerm; m++) {
    let strength = 0;
    for (let j = 0; j < basis.nSpline; j++) {
      const i = j * nShapeTerm + m;
      strength = Math.max(strength, normal[i * n + i]);
    }
    // No stronger than the diagonal: what is lost in rounding beside a stiff gauge is lost to the shape.
    for (const gauge of gauges) stiffen(normal, n, m, gauge, strength / sumOfSquares(gauge));
    if (basis.canMove && !widthsFollow) stiffen(normal, n, m, width, 1 / (widening * stretchPower(table)) ** 2);
  }
}

/** normal += weight · g gᵀ for term m. */
function stiffen(normal: Float64Array, n: number, m: number, gauge: Float64Array, weight: number): void {
  for (let j = 0; j < gauge.length; j++) {
    for (let i = 0; i <= j; i++) {
      normal[(j * nShapeTerm + m) * n + i * nShapeTerm + m] += weight * gauge[j] * gauge[i];
    }
  }
}

function sumOfSquares(values: Float64Array): number {
  return values.reduce((sum, value) => sum + value * value, 0);
}

/** ∫ ((v c₀)′)² dv: what a widening by its own size measures along the direction of a widening. */
function stretchPower({ n, start, step, values }: ShapeTable): number {
  const at = (i: number) => (start + i * step) * values[i * 2 * nShapeTerm + nShapeTerm];
  let sum = 0;
  for (let i = 1; i < n - 1; i++) sum += (at(i + 1) - at(i - 1)) ** 2 / (4 * step);
  return sum;
}

/** ∫ β_j c₀′ dv and ∫ β_j (v c₀)′ dv for every spline: directions of a shift and of a change of width. */
function shiftAndWidth(basis: ShapeBasis, table: ShapeTable): [Float64Array, Float64Array] {
  const { nSpline, n, step, start } = basis;
  const [shift, width] = [new Float64Array(nSpline), new Float64Array(nSpline)];
  const slope = (i: number) => table.values[i * 2 * nShapeTerm + nShapeTerm];
  for (let i = 1; i < n - 1; i++) {
    const curvature = (slope(i + 1) - slope(i - 1)) / (2 * step);
    const v = start + i * step;
    for (let j = 0; j < nSpline; j++) {
      const value = basis.values[i * 2 * nSpline + nSpline + j];
      shift[j] += value * curvature * step;
      width[j] += value * (v * curvature + slope(i)) * step;
    }
  }
  return [shift, width];
}

/** The first term to unit integral, the others to zero integral. */
export function normalise(c: Float64Array, basis: ShapeBasis): void {
  const integral = (m: number) => basis.whole.reduce((sum, whole, j) => sum + whole * c[j * nShapeTerm + m], 0);
  const unit = integral(0);
  for (let j = 0; j < basis.nSpline; j++) c[j * nShapeTerm] /= unit;
  for (let m = 1; m < nShapeTerm; m++) {
    const excess = integral(m);
    for (let j = 0; j < basis.nSpline; j++) c[j * nShapeTerm + m] -= excess * c[j * nShapeTerm];
  }
}
