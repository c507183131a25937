/** Joint extraction of a column: all fibres at once, d = A f + noise with A's columns the fibres' profiles.
 * Least squares with N = diag(variance): (AᵀN⁻¹A) f = AᵀN⁻¹ d, banded because only near neighbours overlap.
 * (AᵀN⁻¹A)⁻¹ is the covariance, and no unbiased estimator has a smaller one (Cramér–Rao). */
import { factorBand, inverseBand, solveBand } from "./banded.js";
import type { Stretch } from "./chunks.js";
import { type Column, sharedRows, weightAt, windowFirst } from "./column.js";

export interface Normal {
  /** nFibre × (bandwidth+1): AᵀN⁻¹A, laid out as banded.ts says. */
  band: Float64Array;
  /** nFibre: AᵀN⁻¹d. */
  rhs: Float64Array;
}

/** What every estimator gives for one column. */
export interface Estimate {
  /** nFibre, e⁻ */
  flux: Float64Array;
  /** nFibre, e⁻²; 0 for a fibre that no good pixel measures. */
  variance: Float64Array;
  /** nFibre, e⁻²: covariance with the fibre before; the first is 0. */
  covarianceBelow: Float64Array;
}

/** Share of its light that a fibre must have on good pixels to take part. One with less (off the frame, under a bleed)
 * says nothing of its own flux, but left free it would take the pixels of its far wing away from its neighbours. */
export const leastShare = 0.01;

export function noNormal(nFibre: number, bandwidth: number): Normal {
  return { band: new Float64Array(nFibre * (bandwidth + 1)), rhs: new Float64Array(nFibre) };
}

/** Normal equations of the column with its present inverse variances; row and column of a fibre without its share are 0. */
export function normalEquations(column: Column): Normal {
  const normal = noNormal(column.nFibre, column.bandwidth);
  fillNormal(column, normal, 0, column.nFibre, 0);
  return normal;
}

/** The rows of fibres k0 … k1 − 1, which see no fibre below `lowest`. */
export function fillNormal(column: Column, { band, rhs }: Normal, k0: number, k1: number, lowest: number): void {
  const { bandwidth, weights } = column;
  const row = bandwidth + 1;
  for (let k = k0; k < k1; k++) {
    const measured = isWhole(column, k) || goodShare(column, k) >= leastShare;
    band.fill(0, k * row, (k + 1) * row);
    rhs[k] = 0;
    for (let j = 0; j <= Math.min(k - lowest, bandwidth); j++) {
      if (!measured || (j > 0 && !(band[(k - j) * row] > 0))) continue;
      const [from, to] = sharedRows(column, k, k - j);
      for (let y = from; y < to; y++) {
        const weighted = weightAt(column, weights, k, y) * column.inverseVariance[y];
        band[k * row + j] += weighted * weightAt(column, weights, k - j, y);
        if (j === 0) rhs[k] += weighted * column.net[y];
      }
    }
  }
}

/** Whether fibre k's window has lost no pixel. */
function isWhole(column: Column, k: number): boolean {
  const first = windowFirst(column, k);
  return column.bits.subarray(first, first + column.nWindow).every((bits) => bits === 0);
}

/** Share of fibre k's light that falls on good pixels. */
function goodShare(column: Column, k: number): number {
  const first = windowFirst(column, k);
  let share = 0;
  for (let i = 0; i < column.nWindow; i++) {
    if (column.inverseVariance[first + i] > 0) share += column.weights[k * column.nWindow + i];
  }
  return share;
}

/** Fluxes alone, for the rounds in which variances and rejections settle. e⁻. */
export function solveNormal({ band, rhs }: Normal, nFibre: number, bandwidth: number): Float64Array {
  const factors = band.slice();
  factorBand(factors, nFibre, bandwidth);
  const flux = rhs.slice();
  solveBand(factors, nFibre, bandwidth, flux);
  return flux;
}

/** Fluxes of fibres k0 … k1 − 1 while the others keep theirs, `flux` [nFibre]: [k1 − k0], e⁻. `highest`: fibres from there on
 * are not looked at. */
export function solveStretch(
  { band, rhs }: Normal,
  bandwidth: number,
  flux: Float64Array,
  [k0, k1]: Stretch,
  highest: number,
): Float64Array {
  const row = bandwidth + 1;
  const own = rhs.slice(k0, k1);
  for (let k = k0; k < Math.min(k0 + bandwidth, k1); k++) {
    for (let j = k - k0 + 1; j <= Math.min(bandwidth, k); j++) own[k - k0] -= band[k * row + j] * flux[k - j];
  }
  for (let k = k1; k < Math.min(k1 + bandwidth, highest); k++) {
    for (let j = k - k1 + 1; j <= bandwidth; j++) {
      if (k - j >= k0) own[k - j - k0] -= band[k * row + j] * flux[k];
    }
  }
  const factors = band.slice(k0 * row, k1 * row);
  factorBand(factors, k1 - k0, bandwidth);
  solveBand(factors, k1 - k0, bandwidth, own);
  return own;
}

/** Variances and covariances of a fit that has settled on `flux` [nFibre], e⁻. */
export function jointCovariance(normal: Normal, flux: Float64Array, nFibre: number, bandwidth: number): Estimate {
  const factors = normal.band.slice();
  factorBand(factors, nFibre, bandwidth);
  const inverse = inverseBand(factors, nFibre, bandwidth);
  const row = bandwidth + 1;
  return {
    flux,
    variance: Float64Array.from({ length: nFibre }, (_, k) => inverse[k * row]),
    covarianceBelow: Float64Array.from({ length: nFibre }, (_, k) =>
      k > 0 && bandwidth > 0 ? inverse[k * row + 1] : 0,
    ),
  };
}

export function joint(normal: Normal, nFibre: number, bandwidth: number): Estimate {
  return jointCovariance(normal, solveNormal(normal, nFibre, bandwidth), nFibre, bandwidth);
}
