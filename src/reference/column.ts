/** One column of the frame with everything the estimators need of it. Rows run over the frame and `margin` rows
 * beyond each end, so that a window may hang over the edge: what lies outside is never good. */
import type { ColumnNoise } from "./variance.js";

export interface Column {
  /** ny + 2·margin */
  nRow: number;
  margin: number;
  nFibre: number;
  nWindow: number;
  /** Fibres whose windows may overlap: k with k − bandwidth … k + bandwidth. */
  bandwidth: number;
  /** nFibre: first row of each window, counted from the frame's row 0. */
  start: Int32Array;
  /** nFibre × nWindow: weights of the profiles, unit sum over the whole profile. */
  weights: Float64Array;
  /** Rows to either side of a window on which the wings' light is known. */
  wing: number;
  /** nFibre × 2·wing: weights below the window, then above it. */
  wings: Float64Array;
  /** nFibre: centres, counted from `start`, pixels. */
  centre: Float64Array;
  /** nRow, e⁻: data with the background taken off. */
  light: Float64Array;
  /** nRow, e⁻. */
  background: Float64Array;
  noise: ColumnNoise;
  /** nRow: mask bits and rejections; 0 is good. */
  bits: Uint8Array;
  /** nRow, e⁻⁻²: 0 where not good. */
  inverseVariance: Float64Array;
  /** nRow, e⁻: light less that of the wings, as the fit sees it. */
  net: Float64Array;
}

/** First row of fibre k's window, counted as `light` is. */
export function windowFirst(column: Column, k: number): number {
  return column.margin + column.start[k];
}

/** Rows that the windows of fibres k and m share: [from, to), counted as `light` is. */
export function sharedRows(column: Column, k: number, m: number): [number, number] {
  const from = Math.max(column.start[k], column.start[m]) + column.margin;
  const to = Math.min(column.start[k], column.start[m]) + column.nWindow + column.margin;
  return [from, to];
}

/** Weight of fibre k in row `row`, which must lie in its window. */
export function weightAt(column: Column, weights: Float64Array, k: number, row: number): number {
  return weights[k * column.nWindow + row - column.margin - column.start[k]];
}
