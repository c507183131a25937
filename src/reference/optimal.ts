/** Optimal extraction of each fibre alone: f = Σ P d/v ÷ Σ P²/v (Horne 1986, PASP 98, 609, eq. 8), its variance
 * 1 ÷ Σ P²/v also where pixels are masked; v includes the neighbours' light. */
import type { RawEstimate } from "./crosstalk.js";
import type { Normal } from "./joint.js";

/** The normal equations hold all it needs: W = D⁻¹AᵀN⁻¹ with D their diagonal, so C = D⁻¹M and V = D⁻¹MD⁻¹. */
export function optimal({ band, rhs }: Normal, nFibre: number, bandwidth: number): RawEstimate {
  const row = bandwidth + 1;
  const full = 2 * bandwidth + 1;
  const inverse = Float64Array.from({ length: nFibre }, (_, k) => (band[k * row] > 0 ? 1 / band[k * row] : 0));
  const raw = Float64Array.from({ length: nFibre }, (_, k) => rhs[k] * inverse[k]);
  const crosstalk = new Float64Array(nFibre * full);
  const covariance = new Float64Array(nFibre * row);
  for (let k = 0; k < nFibre; k++) {
    for (let j = 0; j <= Math.min(k, bandwidth); j++) {
      const m = band[k * row + j];
      crosstalk[k * full + bandwidth - j] = m * inverse[k];
      crosstalk[(k - j) * full + bandwidth + j] = m * inverse[k - j];
      covariance[k * row + j] = m * inverse[k] * inverse[k - j];
    }
  }
  return { raw, crosstalk, covariance };
}
