/** Who spills how much on whom: C[k][m], the share of fibre m's light that the estimator of fibre k counts, from the
 * profile model.
 *
 * With an estimator's weights W and the profiles A, E[W d] = W A f =: C f. The boxcar's C holds what each aperture catches of
 * its own fibre (diagonal) and of its neighbours; that of optimal extraction has 1 on its diagonal, and depends on the
 * frame through the variances. Neighbours count in slit positions, dead ones included. */
import type { Column } from "../reference/column.js";
import type { Extraction } from "./extract.js";
import { modelColumns } from "./modelColumn.js";

/** Estimators that look at each fibre alone. */
export type LoneEstimator = "boxcar" | "optimal";

/** Columns from one sample of C to the next. */
const sampleStep = 64;

export interface CrosstalkMatrix {
  estimator: LoneEstimator;
  /** Pixels each side of the tramline that the boxcar sums; NaN for optimal. */
  halfAperture: number;
  nFibre: number;
  /** Slit positions to each side that are told of. */
  reach: number;
  /** Columns at which C was taken. */
  columns: number[];
  /** nFibre × (2·reach + 1) × columns: C[k][k + j] of column i at ((k·(2·reach+1)) + j + reach)·nColumn + i; NaN where k or
   * k + j is dead, outside the slit or off the detector. */
  values: Float64Array;
  /** nFibre × (2·reach + 1): mean over the columns in which there is a value. */
  mean: Float64Array;
}

/** C of the extraction's own method; for joint, which has none, what a plain boxcar would do on the same frame. */
export function measureCrosstalk(extraction: Extraction): CrosstalkMatrix {
  const { fit, plan, spectra } = extraction;
  const { nFibre, nx } = spectra;
  const estimator = spectra.method === "optimal" ? "optimal" : "boxcar";
  const reach = slitReach(plan.active, plan.bandwidth);
  const columns = sampledColumns(nx);
  const values = new Float64Array(nFibre * (2 * reach + 1) * columns.length).fill(Number.NaN);
  const columnAt = modelColumns(fit);
  columns.forEach((x, i) => {
    const column = columnAt(x);
    const weights = estimatorWeights(column, estimator, fit.input.halfAperture);
    forEachPair(column, (k, m) => {
      const [from, to] = [plan.active[k], plan.active[m]];
      const at = from * (2 * reach + 1) + to - from + reach;
      values[at * columns.length + i] = sharedLight(column, weights, k, m);
    });
  });
  const halfAperture = estimator === "boxcar" ? fit.input.halfAperture : Number.NaN;
  return { estimator, halfAperture, nFibre, reach, columns, values, mean: meanOverColumns(values, columns.length) };
}

/** Weights W of each fibre's estimator on the pixels of its window: [nFibre × nWindow]. */
export function estimatorWeights(column: Column, estimator: LoneEstimator, halfAperture: number): Float64Array {
  const { nFibre, nWindow, centre, weights, inverseVariance } = column;
  const found = new Float64Array(nFibre * nWindow);
  for (let k = 0; k < nFibre; k++) {
    const first = column.margin + column.start[k];
    let norm = 0;
    for (let i = 0; i < nWindow; i++) {
      const at = k * nWindow + i;
      if (inverseVariance[first + i] === 0) continue;
      if (estimator === "boxcar") {
        const [upper, lower] = [
          Math.min(i + 0.5, centre[k] + halfAperture),
          Math.max(i - 0.5, centre[k] - halfAperture),
        ];
        found[at] = Math.max(upper - lower, 0);
      } else {
        found[at] = weights[at] * inverseVariance[first + i];
        norm += weights[at] * found[at];
      }
    }
    if (norm > 0) for (let i = 0; i < nWindow; i++) found[k * nWindow + i] /= norm;
  }
  return found;
}

/** Share of fibre m's light that the estimator of fibre k counts; NaN when k's tramline is off the frame. */
export function sharedLight(column: Column, estimator: Float64Array, k: number, m: number): number {
  const { start, nWindow, weights } = column;
  const row = start[k] + column.centre[k];
  if (!(row >= -0.5 && row < column.nRow - 2 * column.margin - 0.5)) return Number.NaN;
  let share = 0;
  for (let i = Math.max(0, start[m] - start[k]); i < Math.min(nWindow, start[m] - start[k] + nWindow); i++) {
    share += estimator[k * nWindow + i] * weights[m * nWindow + i + start[k] - start[m]];
  }
  return share;
}

function forEachPair({ nFibre, bandwidth }: Column, visit: (k: number, m: number) => void): void {
  for (let k = 0; k < nFibre; k++) {
    for (let m = Math.max(k - bandwidth, 0); m <= Math.min(k + bandwidth, nFibre - 1); m++) visit(k, m);
  }
}

/** Slit positions between the furthest fibres whose windows may meet. */
function slitReach(active: number[], bandwidth: number): number {
  return active.reduce((most, from, k) => Math.max(most, (active[k + bandwidth] ?? from) - from), bandwidth);
}

export function sampledColumns(nx: number): number[] {
  const first = Math.min(sampleStep, nx) >> 1;
  return Array.from({ length: Math.ceil((nx - first) / sampleStep) }, (_, i) => first + i * sampleStep);
}

function meanOverColumns(values: Float64Array, nColumn: number): Float64Array {
  return Float64Array.from({ length: values.length / nColumn }, (_, at) => {
    const there = values.subarray(at * nColumn, (at + 1) * nColumn).filter((value) => !Number.isNaN(value));
    return there.reduce((sum, value) => sum + value, 0) / there.length;
  });
}
