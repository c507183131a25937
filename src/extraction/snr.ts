/** Signal to noise of spectra. */
import { median } from "../reference/median.js";
import { type Spectra, UNUSABLE } from "./spectra.js";

/** Median of flux / σ over the fibre's usable points, per dispersion pixel: [nFibre]; NaN for a fibre without any. */
export function medianSignalToNoise(spectra: Spectra): Float64Array {
  const { nFibre, nx, flux, variance, flags } = spectra;
  return Float64Array.from({ length: nFibre }, (_, k) => {
    const ratios: number[] = [];
    for (let i = k * nx; i < (k + 1) * nx; i++) {
      if ((flags[i] & UNUSABLE) === 0 && variance[i] > 0) ratios.push(flux[i] / Math.sqrt(variance[i]));
    }
    return median(ratios);
  });
}
