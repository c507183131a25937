/** The wavelength of every column of every fibre:
 *
 *     λ_k(x) = Σ_j c_kj · P_j(2x/(nx−1) − 1)      Å
 *
 * each fibre with its own Legendre series, whatever fit it came from, so that a reader needs nothing else. */
import { legendreArgument, legendreValue } from "../reference/legendre.js";
import type { Medium } from "./medium.js";

export interface WavelengthSolution {
  nFibre: number;
  nx: number;
  medium: Medium;
  degree: number;
  /** nFibre × (degree + 1), Å; NaN in rows of fibres without a solution. */
  legendre: Float64Array;
  /** nFibre: lines used, rms of their residuals in pixels, and the columns of the outermost of them, beyond which the
   * series is a guess. A fibre filled from its neighbours has no lines, no rms, and its neighbour's columns. */
  nLine: Int32Array;
  rms: Float64Array;
  seenFrom: Float64Array;
  seenTo: Float64Array;
  /** nFibre: standard error of the series between those columns, pixels, root mean square; where it is known. */
  error?: Float64Array;
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

/** Å per column at column `x`; negative where wavelength falls. Difference over one column: its error is the third derivative's
 * share, below 1e-9 of the value for the smooth series of an arc. */
export function dispersionAt(solution: WavelengthSolution, fibre: number, x: number): number {
  return wavelengthAt(solution, fibre, x + 0.5) - wavelengthAt(solution, fibre, x - 0.5);
}

/** The column where a fibre has `wavelength`, by Newton's method from the middle; NaN for a fibre without a solution and for
 * wavelengths more than `beyond` columns off the detector. */
export function columnAt(solution: WavelengthSolution, fibre: number, wavelength: number, beyond = 0): number {
  const { nx } = solution;
  let x = (nx - 1) / 2;
  for (let step = 0; step < 30; step++) {
    const move = (wavelength - wavelengthAt(solution, fibre, x)) / dispersionAt(solution, fibre, x);
    if (!Number.isFinite(move)) return Number.NaN;
    // Outside the series turns round sooner or later.
    x = Math.min(Math.max(x + move, -0.1 * nx), 1.1 * nx);
    if (Math.abs(move) < 1e-9) return x >= -beyond && x <= nx - 1 + beyond ? x : Number.NaN;
  }
  return Number.NaN;
}

/** Full width at half maximum of unresolved lines at column `x`, pixels. */
export function fwhmAt({ nx, fwhmDegree, fwhm }: WavelengthSolution, fibre: number, x: number): number {
  return legendreValue(fwhm, legendreArgument(x, nx), fibre * (fwhmDegree + 1), fwhmDegree + 1);
}

/** nFibre × nx, Å. @param zeroPoint pixels by which the frame's light lies at higher columns than the arc's: one for all
 * fibres, or one each. */
export function wavelengthImage(solution: WavelengthSolution, zeroPoint: number | Float64Array = 0): Float64Array {
  const { nFibre, nx } = solution;
  const image = new Float64Array(nFibre * nx);
  for (let k = 0; k < nFibre; k++) {
    const moved = typeof zeroPoint === "number" ? zeroPoint : zeroPoint[k];
    for (let x = 0; x < nx; x++) image[k * nx + x] = wavelengthAt(solution, k, x - moved);
  }
  return image;
}
