/** Signal to noise of spectra. */
import { medianInPlace } from "../reference/median.js";
import { type Spectra, UNUSABLE } from "./spectra.js";

/** Median of flux / σ over the fibre's usable points, per dispersion pixel: [nFibre]; NaN for a fibre without any. */
export function medianSignalToNoise(spectra: Spectra): Float64Array {
  const ratios = new Float64Array(spectra.nx);
  return Float64Array.from({ length: spectra.nFibre }, (_, k) => medianRatio(spectra, k, ratios));
}

/** `ratios`: [nx], overwritten. */
function medianRatio({ nx, flux, variance, flags }: Spectra, k: number, ratios: Float64Array): number {
  let n = 0;
  for (let i = k * nx; i < (k + 1) * nx; i++) {
    if ((flags[i] & UNUSABLE) !== 0 || !(variance[i] > 0)) continue;
    ratios[n++] = flux[i] / Math.sqrt(variance[i]);
  }
  return medianInPlace(ratios, n);
}
