/** What an extraction works on and what it gives, for kernel and reference alike. */
import type { ProfileInput } from "./profile.js";
import type { NoiseIngredients } from "./variance.js";

export type Method = "joint" | "optimal" | "boxcar";

/** Smooth background b(x, y) = Σ c[i][j] P_i(x) P_j(y), e⁻ per pixel; x and y each mapped to [−1, 1]. */
export interface SmoothBackground {
  nX: number;
  nY: number;
  /** nX × nY */
  coefficients: Float64Array;
}

export interface ExtractionInput extends ProfileInput {
  /** ny × nx, e⁻. */
  electrons: Float32Array;
  /** ny × nx, bits of MaskBit. */
  mask: Uint8Array;
  noise: NoiseIngredients;
  background: SmoothBackground;
  /** nFibre × 2: first and last column in which the tramline was traced. */
  seen: Int32Array;
  bandwidth: number;
  method: Method;
  crosstalk: boolean;
  /** Pixels each side of the tramline that the boxcar sums. */
  halfAperture: number;
  /** ε: share of the light nearby by which data may miss the model before noise. */
  profileError: number;
  /** Reject pixels beyond `kappa`, mark suspects beyond `growKappa`; 0 takes `rejected` as it is. */
  kappa: number;
  growKappa: number;
  minRounds: number;
  maxRounds: number;
  /** ny × nx, bits of MaskBit: what earlier passes rejected; this pass adds to it. */
  rejected: Uint8Array;
}

/** The same before any pass: where `rejected` is absent, nothing is rejected yet. */
export type ExtractionStart = Omit<ExtractionInput, "rejected"> & Partial<Pick<ExtractionInput, "rejected">>;

/** Images nFibre × nx, index = fibre · nx + x. */
export interface ExtractionOutput {
  /** e⁻ per dispersion pixel: all the light of the fibre in that column. */
  flux: Float32Array | Float64Array;
  /** e⁻²: its variance. */
  variance: Float32Array | Float64Array;
  /** e⁻²: covariance of fibre k with fibre k + 1 in the same column; the last row is NaN. */
  neighbourCovariance: Float32Array | Float64Array;
  /** Bits of Flag. */
  flags: Int32Array;
  /** Reduced χ² of the profile fit in the fibre's window. */
  chi2: Float32Array | Float64Array;
  /** e⁻ per pixel: scattered light under the fibre. */
  background: Float32Array | Float64Array;
  /** e⁻ per dispersion pixel: of the joint fit, whatever the method. */
  fitFlux?: Float64Array;
}
