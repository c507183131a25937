/** Variance of a pixel from the model of its light (CCD equation), never from the data: weights that follow the
 * noise of the data bias faint fluxes low.
 *
 *     v = fixed + max(m, 0) · inverseResponse + responseRelativeVariance · m²      e⁻² */

/** Where a frame keeps the ingredients of its variances. */
export interface NoiseIngredients {
  /** ny: which row of `fixedVariance` holds for this row of the frame. */
  bandOfRow: Uint8Array;
  /** nBand × nx, e⁻²: (readNoise² + dark·t) / r² and the variance of bias and dark; used where no calibration image enters. */
  fixedVariance: Float32Array;
  /** ny × nx, e⁻²: replaces `fixedVariance` when present. */
  fixedVarianceImage?: Float32Array;
  /** ny × nx: 1/r, r the pixel response; absent means 1. */
  inverseResponse?: Float32Array;
  /** ny × nx: (σ_r / r)²; absent means 0. */
  responseRelativeVariance?: Float32Array;
}

/** The same for one column, margins included. */
export interface ColumnNoise {
  /** n, e⁻²: read noise, dark and calibration stacks. */
  fixed: Float64Array;
  /** n: 1 over the pixel response. */
  inverseResponse: Float64Array;
  /** n: (σ_r / r)² of the pixel response r. */
  responseRelativeVariance: Float64Array;
}

/** Variance of pixel `i` where the model holds `light` e⁻, background included. e⁻². */
export function pixelVariance(noise: ColumnNoise, i: number, light: number): number {
  return (
    noise.fixed[i] + Math.max(light, 0) * noise.inverseResponse[i] + noise.responseRelativeVariance[i] * (light * light)
  );
}
