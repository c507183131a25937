/** Functions that a shape is made of, as a table: between its points their integrals follow Hermite's cubic. */

/** Splines, or whatever functions a shape is made of, on a table of v: values and integrals. */
export interface ShapeBasis {
  nSpline: number;
  start: number;
  step: number;
  n: number;
  /** n × 2·nSpline: integrals from −∞ to v, then values. */
  values: Float64Array;
  /** nSpline: integral over all v. */
  whole: Float64Array;
  /** nSpline: how far the coefficients of terms beyond the first may stray from 0, as a share of the first term's
   * coefficient, and at the least. */
  priorShare: Float64Array;
  priorSpread: Float64Array;
  /** Whether the functions can shift and widen the shape, which steps must then be kept from. */
  canMove: boolean;
  referenceWidth: number;
  /** 2 · (n − 1): for each cell of the table, the first spline that is not yet whole and the last that has begun. */
  begun: Int32Array;
}

/** Integrals of all splines up to some v. */
export interface BasisEdge {
  /** nSpline */
  integral: Float64Array;
  /** Splines before the first are whole here, those behind the last have not begun. */
  first: number;
  last: number;
}

export function emptyEdge(basis: ShapeBasis): BasisEdge {
  return { integral: new Float64Array(basis.nSpline), first: 0, last: basis.nSpline - 1 };
}

/** Integrals of all splines up to v, between the table's points by Hermite's cubic: fills `edge`. */
export function basisAt(basis: ShapeBasis, v: number, edge: BasisEdge): void {
  const { n, nSpline, step, values } = basis;
  const at = (v - basis.start) / step;
  const cell = Math.min(Math.max(Math.floor(at), 0), n - 2);
  const t = Math.min(Math.max(at - cell, 0), 1);
  const u = 1 - t;
  const smooth = t * t * (3 - 2 * t);
  const [riseHere, riseThere] = [step * t * u * u, step * t * u * t];
  const row = cell * 2 * nSpline;
  edge.first = basis.begun[2 * cell];
  edge.last = basis.begun[2 * cell + 1];
  edge.integral.set(basis.whole.subarray(0, edge.first));
  edge.integral.fill(0, edge.last + 1);
  for (let j = edge.first; j <= edge.last; j++) {
    const c0 = values[row + j];
    const rise = riseHere * values[row + nSpline + j] - riseThere * values[row + 3 * nSpline + j];
    edge.integral[j] = c0 + smooth * (values[row + 2 * nSpline + j] - c0) + rise;
  }
}
