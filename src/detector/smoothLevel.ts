/** A smooth curve through noisy samples: least squares with uniform cubic B-splines (de Boor, A Practical Guide to
 * Splines, 1978), the number of intervals chosen by the data, wild samples clipped against the samples' own noise.
 *
 * The noise comes from differences of neighbouring samples, which a smooth drift hardly enters. Of 1, 2, 3, 4, 5, 7, …
 * intervals that number is taken which makes χ² + 2·(number of coefficients) least (Akaike 1974, IEEE TAC 19, 716). */
import { factorBand, inverseBand, solveBand } from "../reference/banded.js";
import { clippedScatter, quantileInPlace } from "./clip.js";

const CLIP_SIGMAS = 5;
const PRICE_OF_COEFFICIENT = 2;
const MOST_INTERVALS = 96;
const RUNNING = 11;

export interface SmoothLevel {
  /** n: the curve at every sample, also where there was none; held constant beyond the first and last sample. */
  level: Float64Array;
  /** n: its variance. */
  variance: Float64Array;
  /** Standard deviation of one sample about the curve. */
  sampleSigma: number;
  intervals: number;
  nClipped: number;
}

/** Fits `samples` [n], NaN where there is none. Without any sample the level is NaN throughout. */
export function fitSmoothLevel(samples: Float64Array): SmoothLevel {
  const sampleSigma = noiseFromNeighbours(samples);
  const reach = CLIP_SIGMAS * sampleSigma;
  // A wild sample would bend the first curve away from its good neighbours: a running median is not bent.
  let used = keptWithin(samples, runningMedian(samples), reach);
  let fit = bestFit(used.values, sampleSigma);
  for (let turn = 0; turn < 5; turn++) {
    const next = keptWithin(samples, fit.level, reach);
    if (next.values.every((value, i) => Object.is(value, used.values[i]))) break;
    used = next;
    fit = bestFit(used.values, sampleSigma);
  }
  return { ...fit, sampleSigma, nClipped: used.nClipped };
}

/** σ of a sample: scatter of second differences s(i−1) − 2 s(i) + s(i+1), whose variance is 6 σ², blind to a slope. */
function noiseFromNeighbours(samples: Float64Array): number {
  if (samples.length < 3) return 0;
  const differences = new Float64Array(samples.length - 2);
  for (let i = 0; i < differences.length; i++) differences[i] = samples[i] - 2 * samples[i + 1] + samples[i + 2];
  const sigma = clippedScatter(differences).sigma / Math.sqrt(6);
  return Number.isFinite(sigma) ? sigma : 0;
}

/** Median of RUNNING samples about each; fewer towards the ends, as many before as behind, so that a slope stays. */
function runningMedian(samples: Float64Array): Float64Array {
  const near = new Float64Array(RUNNING);
  return samples.map((_, i) => {
    const half = Math.min(RUNNING >> 1, i, samples.length - 1 - i);
    let n = 0;
    for (let k = i - half; k <= i + half; k++) if (!Number.isNaN(samples[k])) near[n++] = samples[k];
    return quantileInPlace(near, 0.5, n);
  });
}

function keptWithin(samples: Float64Array, level: Float64Array, reach: number) {
  let nClipped = 0;
  const values = samples.map((sample, i) => {
    if (reach === 0 || !(Math.abs(sample - level[i]) > reach)) return sample;
    nClipped++;
    return Number.NaN;
  });
  return { values, nClipped };
}

interface Fit {
  level: Float64Array;
  variance: Float64Array;
  intervals: number;
}

function bestFit(samples: Float64Array, sigma: number): Fit {
  const [first, last] = extent(samples);
  const n = samples.length;
  if (last < first) {
    return { level: new Float64Array(n).fill(Number.NaN), variance: new Float64Array(n), intervals: 0 };
  }
  if (last - first < 8) return constantFit(samples, sigma);
  let best: Spline | undefined;
  let bestCost = Number.POSITIVE_INFINITY;
  for (
    let intervals = 1;
    intervals <= MOST_INTERVALS && (last - first) / intervals >= 4;
    intervals = Math.ceil(1.25 * intervals)
  ) {
    const spline = splineFit(samples, first, last, intervals);
    if (spline === undefined) break;
    // Without noise every misfit counts; a unit of rounding keeps the cost finite.
    const cost = spline.chi2 / Math.max(sigma * sigma, 1e-12) + PRICE_OF_COEFFICIENT * (intervals + 3);
    if (cost < bestCost) {
      bestCost = cost;
      best = spline;
    }
  }
  return best === undefined ? constantFit(samples, sigma) : evaluate(samples, first, last, best, sigma);
}

function extent(samples: Float64Array): [number, number] {
  let first = 0;
  let last = samples.length - 1;
  while (first < samples.length && Number.isNaN(samples[first])) first++;
  while (last >= 0 && Number.isNaN(samples[last])) last--;
  return [first, last];
}

function constantFit(samples: Float64Array, sigma: number): Fit {
  let sum = 0;
  let n = 0;
  for (const sample of samples) {
    if (Number.isNaN(sample)) continue;
    sum += sample;
    n++;
  }
  return {
    level: new Float64Array(samples.length).fill(sum / n),
    variance: new Float64Array(samples.length).fill((sigma * sigma) / n),
    intervals: 0,
  };
}

/** Coefficients, the band of their covariance for samples of unit variance, and χ² of unit variance. */
interface Spline {
  intervals: number;
  coef: Float64Array;
  covariance: Float64Array;
  chi2: number;
}

/** Neighbours of a coefficient that share samples with it, to one side. */
const BAND = 3;

/** Undefined when a stretch of knots has no samples. */
function splineFit(samples: Float64Array, first: number, last: number, intervals: number): Spline | undefined {
  const nCoef = intervals + 3;
  const normal = new Float64Array(nCoef * (BAND + 1));
  const coef = new Float64Array(nCoef);
  const basis = new Float64Array(4);
  // Levels ride on a pedestal of about a thousand counts: fit what is left of it, so that rounding stays small.
  const pedestal = samples[first];
  for (let i = first; i <= last; i++) {
    const sample = samples[i];
    if (Number.isNaN(sample)) continue;
    const at = splineBasis(basis, ((i - first) / (last - first)) * intervals, intervals);
    for (let a = 0; a < 4; a++) {
      coef[at + a] += basis[a] * (sample - pedestal);
      for (let b = 0; b <= a; b++) normal[(at + a) * (BAND + 1) + a - b] += basis[a] * basis[b];
    }
  }
  factorBand(normal, nCoef, BAND);
  for (let k = 0; k < nCoef; k++) if (!(normal[k * (BAND + 1)] > 0)) return undefined;
  solveBand(normal, nCoef, BAND, coef);
  let chi2 = 0;
  for (let i = first; i <= last; i++) {
    const sample = samples[i];
    if (Number.isNaN(sample)) continue;
    const at = splineBasis(basis, ((i - first) / (last - first)) * intervals, intervals);
    let off = sample - pedestal;
    for (let a = 0; a < 4; a++) off -= basis[a] * coef[at + a];
    chi2 += off * off;
  }
  return { intervals, coef, covariance: normal, chi2 };
}

/** The curve at every sample. */
function evaluate(samples: Float64Array, first: number, last: number, spline: Spline, sigma: number): Fit {
  const { intervals, coef } = spline;
  const covariance = inverseBand(spline.covariance, coef.length, BAND);
  const level = new Float64Array(samples.length);
  const variance = new Float64Array(samples.length);
  const basis = new Float64Array(4);
  for (let i = 0; i < samples.length; i++) {
    const inside = Math.min(Math.max(i, first), last);
    const at = splineBasis(basis, ((inside - first) / (last - first)) * intervals, intervals);
    let value = samples[first];
    let leverage = 0;
    for (let a = 0; a < 4; a++) {
      value += basis[a] * coef[at + a];
      for (let b = 0; b <= a; b++) {
        leverage += (a === b ? 1 : 2) * basis[a] * basis[b] * covariance[(at + a) * (BAND + 1) + a - b];
      }
    }
    level[i] = value;
    variance[i] = sigma * sigma * leverage;
  }
  return { level, variance, intervals };
}

/** The four uniform cubic B-splines that are not 0 at t ∈ [0, intervals]; returns the index of the first. */
function splineBasis(basis: Float64Array, t: number, intervals: number): number {
  const at = Math.min(Math.floor(t), intervals - 1);
  const u = t - at;
  const v = 1 - u;
  basis[0] = (v * v * v) / 6;
  basis[1] = (3 * u * u * u - 6 * u * u + 4) / 6;
  basis[2] = (3 * v * v * v - 6 * v * v + 4) / 6;
  basis[3] = (u * u * u) / 6;
  return at;
}

/** Inverse of a small symmetric positive matrix [n × n] by Cholesky; undefined when it is singular (a stretch of knots
 * without samples). */
export function invertPositive(matrix: Float64Array, n: number): Float64Array | undefined {
  const root = new Float64Array(n * n);
  for (let i = 0; i < n; i++) {
    for (let j = 0; j <= i; j++) {
      let sum = matrix[i * n + j];
      for (let k = 0; k < j; k++) sum -= root[i * n + k] * root[j * n + k];
      if (i === j) {
        if (!(sum > 1e-12 * matrix[i * n + i])) return undefined;
        root[i * n + i] = Math.sqrt(sum);
      } else root[i * n + j] = sum / root[j * n + j];
    }
  }
  const inverse = new Float64Array(n * n);
  const column = new Float64Array(n);
  for (let c = 0; c < n; c++) {
    for (let i = 0; i < n; i++) {
      let sum = i === c ? 1 : 0;
      for (let k = 0; k < i; k++) sum -= root[i * n + k] * column[k];
      column[i] = sum / root[i * n + i];
    }
    for (let i = n - 1; i >= 0; i--) {
      let sum = column[i];
      for (let k = i + 1; k < n; k++) sum -= root[k * n + i] * inverse[k * n + c];
      inverse[i * n + c] = sum / root[i * n + i];
    }
  }
  return inverse;
}
