/** Ribbons of light, counted in cuts through the picture, and the axis along which they run. */
import { medianOf, quantileInPlace, quantileOfSorted, SIGMA_PER_MAD, sortedFinite } from "./clip.js";

const CUT_WIDTH = 31;
/** A peak stands this many of the cut's own σ above both its valleys, and this share of the cut's range. */
const PROMINENCE_SIGMAS = 6;
const PROMINENCE_SHARE = 0.04;
const FEWEST_RIBBONS = 8;
/** Spacings of ribbons scatter less than this about their median (median deviation); those of spectral lines more. */
const REGULAR = 0.25;

export interface Ribbons {
  /** Peaks in the middle one of three cuts across, by their count. */
  count: number;
  /** Median distance between neighbours, pixels; NaN under two. */
  pitch: number;
  /** Median deviation of that distance over its median. */
  irregularity: number;
}

/** Ribbons that run along x ("x": cuts along y) or along y of an image [ny × nx]. */
export function ribbonsAlong(axis: "x" | "y", image: Float32Array, nx: number, ny: number): Ribbons {
  const length = axis === "x" ? nx : ny;
  const cuts = [0.25, 0.5, 0.75].map((share) => ribbonsOfCut(cutAt(axis, image, nx, ny, Math.floor(share * length))));
  return cuts.sort((a, b) => a.count - b.count)[1];
}

/** The axis along which regular ribbons run; undefined when neither or both show them. */
export function ribbonAxis(image: Float32Array, nx: number, ny: number): "x" | "y" | undefined {
  const alongX = ribbonsAlong("x", image, nx, ny);
  const alongY = ribbonsAlong("y", image, nx, ny);
  if (isRegular(alongX) && alongX.count > 3 * alongY.count) return "x";
  if (isRegular(alongY) && alongY.count > 3 * alongX.count) return "y";
  return undefined;
}

/** Ribbons rather than lines or noise. */
export function isRegular({ count, irregularity }: Ribbons): boolean {
  return count >= FEWEST_RIBBONS && irregularity < REGULAR;
}

interface Cut {
  values: Float64Array;
  /** Typical σ of a value. */
  sigma: number;
}

/** Median over a band of CUT_WIDTH lines, which removes cosmic rays and single bad lines; its noise from differences of
 * neighbours within the band (σ of a median of n: √(π/2n) of one sample's). */
function cutAt(axis: "x" | "y", image: Float32Array, nx: number, ny: number, centre: number): Cut {
  const [along, across] = axis === "x" ? [nx, ny] : [ny, nx];
  const from = Math.max(0, Math.min(along - CUT_WIDTH, centre - (CUT_WIDTH >> 1)));
  const to = Math.min(along, from + CUT_WIDTH);
  const band = new Float64Array(to - from);
  const steps = new Float64Array(Math.max(0, to - from - 1));
  const noise = new Float64Array(across);
  const values = new Float64Array(across);
  const [stride, step] = axis === "x" ? [nx, 1] : [1, nx];
  for (let c = 0; c < across; c++) {
    for (let a = 0; a < band.length; a++) band[a] = image[c * stride + (from + a) * step];
    for (let a = 0; a < steps.length; a++) steps[a] = Math.abs(band[a + 1] - band[a]);
    noise[c] = (SIGMA_PER_MAD / Math.sqrt(2)) * finiteMedian(steps);
    values[c] = finiteMedian(band);
  }
  return { values, sigma: medianOf(noise) * Math.sqrt(Math.PI / (2 * band.length)) };
}

/** `medianOf`, for many short lists: the finite values come first, and lose their order. */
function finiteMedian(values: Float64Array): number {
  let n = 0;
  for (let i = 0; i < values.length; i++) {
    const value = values[i];
    if (Number.isFinite(value)) values[n++] = value;
  }
  return quantileInPlace(values, 0.5, n);
}

function ribbonsOfCut({ values, sigma }: Cut): Ribbons {
  const sorted = sortedFinite(values);
  const range = quantileOfSorted(sorted, 0.95) - quantileOfSorted(sorted, 0.05);
  const prominence = Math.max(PROMINENCE_SIGMAS * sigma, PROMINENCE_SHARE * range);
  const peaks = peaksOf(values, prominence);
  const spacings = peaks.slice(1).map((peak, i) => peak - peaks[i]);
  const pitch = medianOf(spacings);
  return { count: peaks.length, pitch, irregularity: medianOf(spacings.map((s) => Math.abs(s - pitch))) / pitch };
}

/** Maxima that rise by `prominence` from the valley before and fall by it to the valley after. */
function peaksOf(cut: Float64Array, prominence: number): number[] {
  const peaks: number[] = [];
  let rising = true;
  let low = Number.POSITIVE_INFINITY;
  let high = Number.NEGATIVE_INFINITY;
  let highAt = 0;
  for (let i = 0; i < cut.length; i++) {
    const value = cut[i];
    if (Number.isNaN(value)) continue;
    if (rising) {
      if (value > high) {
        high = value;
        highAt = i;
      }
      low = Math.min(low, value);
      if (high - value >= prominence && prominence > 0) {
        if (high - low >= prominence) peaks.push(highAt);
        rising = false;
        low = value;
      }
    } else {
      low = Math.min(low, value);
      if (value - low >= prominence) {
        rising = true;
        high = value;
        highAt = i;
      }
    }
  }
  return peaks;
}
