/** Cross-talk: estimators that look at each fibre alone, f_raw = W d, see E[f_raw] = W A f =: C f, where C tells who
 * spills how much on whom. Solving C gives the light back; its covariance is C⁻¹ V C⁻ᵀ with V = W N Wᵀ.
 *
 * Both come from one symmetric banded system, without C⁻¹: interleave y and x in
 *
 *     V y + C x = f_raw        so that y = 0, x = C⁻¹ f_raw,
 *     Cᵀ y     = 0             and the x-block of the inverse is −(Cᵀ V⁻¹ C)⁻¹ = −C⁻¹ V C⁻ᵀ
 *
 * (block inversion, Golub & Van Loan, Matrix Computations, §2.1). */
import { factorBand, inverseBand, solveBand } from "./banded.js";
import { type Estimate, leastShare } from "./joint.js";

/** What an estimator W makes of a column. */
export interface RawEstimate {
  /** nFibre, e⁻: W d. */
  raw: Float64Array;
  /** nFibre × (2·bandwidth+1): C[k][m] at k·(2·bandwidth+1) + m − k + bandwidth; 0 outside the slit. */
  crosstalk: Float64Array;
  /** nFibre × (bandwidth+1): V, laid out as banded.ts says, e⁻². */
  covariance: Float64Array;
}

/** Light given back to whom it belongs, with the covariance that this leaves. */
export function solveCrosstalk(estimate: RawEstimate, nFibre: number, bandwidth: number): Estimate {
  const half = 2 * bandwidth + 1;
  const n = 2 * nFibre;
  const system = crosstalkSystem(estimate, nFibre, bandwidth);
  factorBand(system, n, half);
  const solution = new Float64Array(n);
  for (let k = 0; k < nFibre; k++) solution[2 * k] = estimate.raw[k];
  solveBand(system, n, half, solution);
  const inverse = inverseBand(system, n, half);
  const entry = (k: number, j: number) => -inverse[(2 * k + 1) * (half + 1) + 2 * j] + 0;
  return {
    flux: Float64Array.from({ length: nFibre }, (_, k) => solution[2 * k + 1]),
    variance: Float64Array.from({ length: nFibre }, (_, k) => entry(k, 0)),
    covarianceBelow: Float64Array.from({ length: nFibre }, (_, k) => (k > 0 && bandwidth > 0 ? entry(k, 1) : 0)),
  };
}

/** Each fibre for itself: only the share of its own light that W catches is made good, f = raw / C[k][k]. */
export function withoutCrosstalk(estimate: RawEstimate, nFibre: number, bandwidth: number): Estimate {
  const own = (k: number) => estimate.crosstalk[k * (2 * bandwidth + 1) + bandwidth];
  const covariance = (k: number, j: number) =>
    own(k) > 0 && own(k - j) > 0 ? estimate.covariance[k * (bandwidth + 1) + j] / (own(k) * own(k - j)) : 0;
  return {
    flux: Float64Array.from({ length: nFibre }, (_, k) => (own(k) > 0 ? estimate.raw[k] / own(k) : 0)),
    variance: Float64Array.from({ length: nFibre }, (_, k) => covariance(k, 0)),
    covarianceBelow: Float64Array.from({ length: nFibre }, (_, k) => (k > 0 && bandwidth > 0 ? covariance(k, 1) : 0)),
  };
}

/** Rows y0 x0 y1 x1 … of the symmetric system, half-bandwidth 2·bandwidth + 1. A fibre of which W catches next to
 * nothing is left out of C, or its light, told by rounding alone, would spoil all others; what it spills stays there. */
export function crosstalkSystem(
  { crosstalk, covariance }: RawEstimate,
  nFibre: number,
  bandwidth: number,
): Float64Array {
  const half = 2 * bandwidth + 1;
  const measured = (k: number) => crosstalk[k * half + bandwidth] >= leastShare;
  const band = new Float64Array(2 * nFibre * (half + 1));
  for (let k = 0; k < nFibre; k++) {
    const yRow = 2 * k * (half + 1);
    const xRow = yRow + half + 1;
    for (let j = 0; j <= Math.min(k, bandwidth); j++) {
      band[yRow + 2 * j] = covariance[k * (bandwidth + 1) + j];
      if (j > 0 && measured(k - j)) band[yRow + 2 * j - 1] = crosstalk[k * half + bandwidth - j];
      if (measured(k)) band[xRow + 2 * j + 1] = crosstalk[(k - j) * half + bandwidth + j];
    }
  }
  return band;
}
