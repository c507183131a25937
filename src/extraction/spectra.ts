/** Spectra: one row a slit position, unlit and dead ones too; never renumbered. */

/** Bits of `Spectra.flags`. Up to 128 they inform and the value stands; from 256 on it is not to be trusted. */
export const Flag = {
  cosmicRay: 1,
  badPixel: 2,
  neighbourSaturated: 4,
  extrapolated: 8,
  varianceUnsettled: 16,
  saturated: 256,
  weightLost: 512,
  dead: 1024,
  outside: 2048,
  noWavelength: 4096,
} as const;

export const UNUSABLE = Flag.saturated | Flag.weightLost | Flag.dead | Flag.outside | Flag.noWavelength;

export type Method = "joint" | "optimal" | "boxcar";

/** Images nFibre × nx, index = fibre · nx + x. NaN where there is no value. */
export interface Spectra {
  nFibre: number;
  nx: number;
  method: Method;
  crosstalkCorrected: boolean;
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
}
