/** Boxcar extraction: the plain sum over ± `halfAperture` pixels about the tramline, edge pixels counted by the
 * fraction that lies inside, masked pixels left out. */
import { type Column, sharedRows, weightAt } from "./column.js";
import type { RawEstimate } from "./crosstalk.js";

/** Plain sums, the share of each fibre's light that each aperture catches, and their covariance. */
export function boxcar(column: Column, halfAperture: number): RawEstimate {
  const { nFibre, bandwidth, weights } = column;
  const aperture = apertures(column, halfAperture);
  const full = 2 * bandwidth + 1;
  const raw = new Float64Array(nFibre);
  const crosstalk = new Float64Array(nFibre * full);
  const covariance = new Float64Array(nFibre * (bandwidth + 1));
  for (let k = 0; k < nFibre; k++) {
    for (let m = Math.max(k - bandwidth, 0); m <= Math.min(k + bandwidth, nFibre - 1); m++) {
      const [from, to] = sharedRows(column, k, m);
      for (let row = from; row < to; row++) {
        const inside = weightAt(column, aperture, k, row);
        crosstalk[k * full + m - k + bandwidth] += inside * weightAt(column, weights, m, row);
        if (m === k) raw[k] += inside * column.net[row];
        if (m <= k && column.inverseVariance[row] > 0) {
          const both = inside * weightAt(column, aperture, m, row);
          covariance[k * (bandwidth + 1) + k - m] += both / column.inverseVariance[row];
        }
      }
    }
  }
  return { raw, crosstalk, covariance };
}

/** Fraction of each window pixel that lies inside the fibre's aperture, 0 where the pixel is not good: [nFibre × nWindow]. */
function apertures(column: Column, halfAperture: number): Float64Array {
  const { nFibre, nWindow, centre } = column;
  const aperture = new Float64Array(nFibre * nWindow);
  for (let k = 0; k < nFibre; k++) {
    for (let i = 0; i < nWindow; i++) {
      if (column.inverseVariance[column.margin + column.start[k] + i] === 0) continue;
      const upper = Math.min(i + 0.5, centre[k] + halfAperture);
      const lower = Math.max(i - 0.5, centre[k] - halfAperture);
      aperture[k * nWindow + i] = Math.max(upper - lower, 0);
    }
  }
  return aperture;
}
