/** How near variances come to the least that any unbiased estimator can have: the Cramér–Rao bound, the diagonal of
 * (AᵀN⁻¹A)⁻¹ with the true profiles A and the true variances N of a column's pixels. */

import type { Spectra } from "../extraction/spectra.js";
import { factorBand, inverseBand } from "../reference/banded.js";
import { median } from "../reference/median.js";

/** Least variances of one column's fluxes, e⁻²: [nFibre]. `profiles`: nFibre × ny, unit sums; `pixelVariance`: ny, e⁻²,
 * Infinity for a pixel without a value. Fibres that share no pixel with the others may stand anywhere.
 * @throws RangeError when lengths differ. */
export function leastVariances(profiles: Float64Array, pixelVariance: Float64Array): Float64Array {
  const ny = pixelVariance.length;
  const nFibre = profiles.length / ny;
  if (!Number.isInteger(nFibre)) {
    throw new RangeError(`${profiles.length} weights do not make whole profiles of ${ny} pixels; give nFibre × ny.`);
  }
  // A dense matrix, kept as a band that reaches from the first fibre to the last.
  const normal = new Float64Array(nFibre * nFibre);
  for (let y = 0; y < ny; y++) {
    for (let i = 0; i < nFibre; i++) {
      const weighted = profiles[i * ny + y] / pixelVariance[y];
      if (weighted === 0) continue;
      for (let j = 0; j <= i; j++) normal[i * nFibre + i - j] += weighted * profiles[j * ny + y];
    }
  }
  factorBand(normal, nFibre, nFibre - 1);
  const inverse = inverseBand(normal, nFibre, nFibre - 1);
  return Float64Array.from({ length: nFibre }, (_, i) => inverse[i * nFibre]);
}

/** Median of variance / bound over the points without any flag. `columns`: where the bound is known; `bounds`: for each of
 * them [nFibre], NaN for fibres that have none. */
export function varianceOverBound(
  { nFibre, nx, variance, flags }: Pick<Spectra, "nFibre" | "nx" | "variance" | "flags">,
  columns: readonly number[],
  bounds: readonly Float64Array[],
): number {
  const ratios: number[] = [];
  columns.forEach((x, c) => {
    for (let k = 0; k < nFibre; k++) {
      const ratio = variance[k * nx + x] / bounds[c][k];
      if (flags[k * nx + x] === 0 && Number.isFinite(ratio)) ratios.push(ratio);
    }
  });
  return median(ratios);
}
