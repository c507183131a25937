/** Joint extraction of a column: all fibres at once, d = A f + noise with A's columns the fibres' profiles.
 * Least squares with N = diag(variance): (AᵀN⁻¹A) f = AᵀN⁻¹ d, banded because only near neighbours overlap.
 * (AᵀN⁻¹A)⁻¹ is the covariance, and no unbiased estimator has a smaller one (Cramér–Rao). */
import { factorBand, inverseBand, solveBand } from "./banded.js";
import { type Column, sharedRows, weightAt } from "./column.js";

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

/** Normal equations of the column with its present inverse variances; row and column of a fibre without its share are 0. */
export function normalEquations(column: Column): Normal {
  const { nFibre, bandwidth, weights } = column;
  const band = new Float64Array(nFibre * (bandwidth + 1));
  const rhs = new Float64Array(nFibre);
  const measured = Array.from({ length: nFibre }, (_, k) => goodShare(column, k) >= leastShare);
  for (let k = 0; k < nFibre; k++) {
    for (let j = 0; j <= Math.min(k, bandwidth); j++) {
      if (!measured[k] || !measured[k - j]) continue;
      const [from, to] = sharedRows(column, k, k - j);
      for (let row = from; row < to; row++) {
        const weighted = weightAt(column, weights, k, row) * column.inverseVariance[row];
        band[k * (bandwidth + 1) + j] += weighted * weightAt(column, weights, k - j, row);
        if (j === 0) rhs[k] += weighted * column.light[row];
      }
    }
  }
  return { band, rhs };
}

/** Share of fibre k's light that falls on good pixels. */
function goodShare(column: Column, k: number): number {
  const first = column.margin + column.start[k];
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

export function joint(normal: Normal, nFibre: number, bandwidth: number): Estimate {
  const factors = normal.band.slice();
  factorBand(factors, nFibre, bandwidth);
  const flux = normal.rhs.slice();
  solveBand(factors, nFibre, bandwidth, flux);
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
