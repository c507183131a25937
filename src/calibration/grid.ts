/** Wavelength grids that all fibres share, so that one set of header cards holds for all of them.
 *
 *     linear   λ_b = start + b·step                   step in Å
 *     log      λ_b = start · exp(b·step)              step in ln λ; c·step is the velocity per bin
 *
 * b = 0 … n−1 are the bins' middles; their edges lie at b ± ½ of the same formula. */
import { exp } from "../reference/exp.js";
import { log } from "../reference/log.js";
import { medianInPlace } from "../reference/median.js";
import { CalibrationError } from "./errors.js";
import type { Medium } from "./medium.js";

export interface SpectralGrid {
  kind: "linear" | "log";
  medium: Medium;
  /** Å, middle of the first bin. */
  start: number;
  /** Å, or in ln λ. */
  step: number;
  n: number;
}

/** What is wanted of a grid; the rest comes from the data. */
export interface GridRequest {
  kind: "linear" | "log";
  /** Å, middles of the first bin and of the last. */
  start?: number | undefined;
  end?: number | undefined;
  /** Å for linear, in ln λ for log. */
  step?: number | undefined;
  number?: number | undefined;
}

/** km/s, exact by the definition of the metre. */
export const LIGHT_SPEED = 299792.458;

/** More bins than any spectrograph fills: a step in the wrong unit. */
const mostBins = 1_000_000;

/** Å at bin `b`, which need not be whole. Relative error below 1e-14 up to a factor e in wavelength. */
export function gridWavelength({ kind, start, step }: SpectralGrid, b: number): number {
  return kind === "linear" ? start + b * step : start * exp(b * step);
}

/** [n + 1] Å. */
export function gridEdges(grid: SpectralGrid): Float64Array {
  return Float64Array.from({ length: grid.n + 1 }, (_, b) => gridWavelength(grid, b - 0.5));
}

/** A grid for `wavelengths`, nFibre × nx in Å of `medium`, NaN in rows without a solution. Left open, it reaches over all
 * fibres' pixels in steps of their median dispersion.
 * @throws CalibrationError when nothing is calibrated, or the request cannot be met. */
export function makeGrid(request: GridRequest, wavelengths: Float64Array, nx: number, medium: Medium): SpectralGrid {
  const data = spanOf(wavelengths, nx);
  const { kind, number: n } = request;
  const start = request.start ?? data.lowest;
  const given = [request.end, request.step, n].filter((one) => one !== undefined).length;
  if (given === 3)
    throw new CalibrationError("End, step and number of bins are all given; leave one of the three out.");
  if (n !== undefined && (!Number.isInteger(n) || n < 2)) {
    throw new CalibrationError(`The number of bins is ${n}; it must be a whole number, 2 or more.`);
  }
  const dispersion = kind === "linear" ? data.dispersion : data.logDispersion;
  const implied = request.end === undefined && request.step !== undefined && n !== undefined;
  const end = request.end ?? (implied ? Number.POSITIVE_INFINITY : data.highest);
  if (!(start > 0) || !(end > start)) {
    throw new CalibrationError(
      `The grid would run from ${start} to ${end} Å; give an end above the start, both over 0.`,
    );
  }
  const length = kind === "linear" ? end - start : log(end / start);
  const step = request.step ?? (n === undefined ? dispersion : length / (n - 1));
  if (!(step > 0)) throw new CalibrationError(`The step is ${step}; it must be over 0.`);
  const nBin = n ?? 1 + Math.ceil(length / step - 1e-9);
  if (!(nBin >= 2 && nBin <= mostBins)) {
    throw new CalibrationError(
      `A grid from ${start} to ${end} Å would have ${nBin} bins; 2 to ${mostBins} are made, so check the step and its unit.`,
    );
  }
  return { kind, medium, start, step, n: nBin };
}

/** Lowest and highest wavelength, and the median of Å per pixel and of that over λ. */
function spanOf(wavelengths: Float64Array, nx: number) {
  let [lowest, highest] = [Number.POSITIVE_INFINITY, 0];
  const steps: number[] = [];
  const ratios: number[] = [];
  // A smooth function's median needs few of its values; the odd step meets columns of all kinds.
  const stride = Math.max(1, Math.floor(nx / 61));
  for (let row = 0; row < wavelengths.length; row += nx) {
    for (let x = 0; x < nx; x++) {
      const here = wavelengths[row + x];
      if (here < lowest) lowest = here;
      if (here > highest) highest = here;
    }
    for (let x = 1; x < nx; x += stride) {
      const step = Math.abs(wavelengths[row + x] - wavelengths[row + x - 1]);
      if (step > 0) {
        steps.push(step);
        ratios.push(step / wavelengths[row + x]);
      }
    }
  }
  if (steps.length === 0) throw new CalibrationError("No fibre has wavelengths, so there is nothing to rebin.");
  return {
    lowest,
    highest,
    dispersion: medianInPlace(Float64Array.from(steps), steps.length),
    logDispersion: medianInPlace(Float64Array.from(ratios), ratios.length),
  };
}
