/** The wavelength of every column of every fibre:
 *
 *     λ_k(x) = Σ_j c_kj · P_j(2x/(nx−1) − 1)      Å
 *
 * each fibre with its own Legendre series, whatever fit it came from, so that a reader needs nothing else. */
import { legendreArgument, legendreValue } from "../reference/legendre.js";

export interface WavelengthSolution {
  nFibre: number;
  nx: number;
  medium: "air" | "vacuum";
  degree: number;
  /** nFibre × (degree + 1), Å; NaN in rows of fibres without a solution. */
  legendre: Float64Array;
  /** nFibre: lines used, rms of their residuals in pixels, and the columns of the outermost of them, beyond which the
   * series is a guess. */
  nLine: Int32Array;
  rms: Float64Array;
  seenFrom: Float64Array;
  seenTo: Float64Array;
  /** Full width at half maximum of unresolved lines in pixels, [nFibre × (fwhmDegree + 1)] of the same series. */
  fwhmDegree: number;
  fwhm: Float64Array;
  /** Of the detector's readout, as tramlines carry it. */
  geometryDigest: string;
}

/** Å at column `x`, which need not be whole; NaN for a fibre without a solution. `fibre` counts from 0. */
export function wavelengthAt({ nx, degree, legendre }: WavelengthSolution, fibre: number, x: number): number {
  return legendreValue(legendre, legendreArgument(x, nx), fibre * (degree + 1), degree + 1);
}

/** nFibre × nx, Å. @param zeroPoint pixels by which the frame's light lies at higher columns than the arc's. */
export function wavelengthImage(solution: WavelengthSolution, zeroPoint = 0): Float64Array {
  const { nFibre, nx } = solution;
  const image = new Float64Array(nFibre * nx);
  for (let k = 0; k < nFibre; k++) {
    for (let x = 0; x < nx; x++) image[k * nx + x] = wavelengthAt(solution, k, x - zeroPoint);
  }
  return image;
}
