/** Variance of a spectrum's samples from what the light should be, not from what was counted: a sample that came out low
 * would else weigh more than one that came out high, and a mean of faint light would come out low.
 *
 *     v(x) = v₀(x) + max(model(x), 0)
 *
 * v₀, what FLUX_VAR holds beyond the flux itself (read noise, neighbours' light), is a running median along x. Where FLUX_VAR
 * is far above that, pixels are lost below the profile, and it is taken as it is. */
import { quantileInPlace } from "../detector/clip.js";
import { type Spectra, UNUSABLE } from "../extraction/spectra.js";

const HALF_WIDTH = 25;
/** FLUX_VAR beyond so many times the model's: pixels were lost. */
const SPOILT = 1.5;

export interface FixedVariance {
  /** nx: v₀, e⁻². */
  fixed: Float64Array;
  /** nx: FLUX_VAR; NaN where the point is not to be used. */
  given: Float64Array;
}

export function fixedVariance({ nx, flux, variance, flags }: Spectra, fibre: number): FixedVariance {
  const from = fibre * nx;
  const usable = (i: number) => (flags[i] & UNUSABLE) === 0 && variance[i] > 0 && Number.isFinite(flux[i]);
  const given = new Float64Array(nx).fill(Number.NaN);
  const beyondLight = new Float64Array(nx);
  for (let x = 0; x < nx; x++) {
    if (!usable(from + x)) continue;
    given[x] = variance[from + x];
    beyondLight[x] = Math.max(given[x] - Math.max(flux[from + x], 0), 0);
  }
  const near = new Float64Array(2 * HALF_WIDTH + 1);
  const fixed = new Float64Array(nx);
  for (let x = 0; x < nx; x++) {
    const to = Math.min(nx - 1, x + HALF_WIDTH);
    let n = 0;
    for (let i = Math.max(0, x - HALF_WIDTH); i <= to; i++) if (given[i] > 0) near[n++] = beyondLight[i];
    fixed[x] = quantileInPlace(near, 0.5, n);
  }
  return { fixed, given };
}

/** e⁻² at column x for so much light; NaN where there is no sample. */
export function modelVariance({ fixed, given }: FixedVariance, x: number, electrons: number): number {
  const expected = fixed[x] + Math.max(electrons, 0);
  return given[x] > SPOILT * expected ? given[x] : given[x] > 0 && expected > 0 ? expected : Number.NaN;
}
