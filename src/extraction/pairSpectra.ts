/** Spectra of two frames of one field side by side: what smooth factor each fibre changed by, and how far spectra at sharp
 * lines differ beyond it. */
import { legendreArgument, legendreFitClipped, legendreValue } from "../reference/legendre.js";
import { median } from "../reference/median.js";
import { type Spectra, UNUSABLE } from "./spectra.js";

/** Columns whose light is summed for one ratio. */
const blockColumns = 64;
const nTerm = 3;
const clipSigma = 4;
/** A block tells a ratio from this signal to noise on. */
const tellingSignal = 10;
/** Columns to each side over which a spectrum's change is taken. */
const changeColumns = 2;
/** A change over this many σ tells how well lines repeat. */
const tellingChange = 20;
/** The second frame's own hits make shortfalls too, on about a per cent of the points; the margin is for what lies beyond. */
const changeQuantile = 0.98;
const margin = 2;
/** What η is at least: focus and seeing change single lines by more than most of the changes show. κ·η = 30 %. */
const leastLineError = 0.06;
const kappa = 5;
/** Typical |difference| over noise from which on the frames are not of the same field; 0.67 when they are. */
const otherFieldSigma = 4;
/** The same for the fibres' scales, upper quartile over lower: clouds and seeing change all fibres much alike. */
const otherFieldSpread = 2.5;

/** Images are [nFibre × nx], active fibres only; NaN where the second frame has no value. */
export interface PairSpectra {
  /** e⁻: the second frame's spectra, and the same times s. */
  second: Float64Array;
  scaled: Float64Array;
  /** e⁻²: of `scaled`. */
  scaledVariance: Float64Array;
  /** e⁻: largest less smallest light within ± 2 columns that both frames have: a hit in one of them is no line. */
  change: Float64Array;
  medianScale: number;
  /** Upper over lower quartile of the fibres' scales. */
  scaleSpread: number;
  /** η: share of the change by which spectra differ beyond noise. */
  lineError: number;
  /** Median |first − scaled| / σ. */
  typicalDifference: number;
}

/** `active`: rows of the spectra that hold light. */
export function pairSpectra(first: Spectra, second: Spectra, active: number[]): PairSpectra {
  const { nx } = first;
  const n = active.length * nx;
  const empty = () => new Float64Array(n).fill(Number.NaN);
  const pair: PairSpectra = {
    second: empty(),
    scaled: empty(),
    scaledVariance: empty(),
    change: empty(),
    medianScale: 1,
    scaleSpread: 1,
    lineError: leastLineError,
    typicalDifference: Number.NaN,
  };
  const common = commonScale(first, second, active);
  const [scales, middles]: number[][] = [[], []];
  active.forEach((row, k) => {
    const scale = fibreScale(first, second, row, common);
    middles.push(legendreValue(scale, 0));
    for (let x = 0; x < nx; x++) {
      const [i, at] = [k * nx + x, row * nx + x];
      if (!isGood(second, at)) continue;
      const s = legendreValue(scale, legendreArgument(x, nx));
      pair.second[i] = second.flux[at];
      pair.scaled[i] = s * second.flux[at];
      pair.scaledVariance[i] = s * s * second.variance[at];
      scales.push(s);
    }
    takeChanges(pair, first.flux.subarray(row * nx, (row + 1) * nx), k * nx);
  });
  pair.medianScale = scales.length > 0 ? median(scales) : common;
  const sorted = Float64Array.from(middles).sort();
  pair.scaleSpread = sorted[Math.floor(0.75 * (sorted.length - 1))] / sorted[Math.floor(0.25 * (sorted.length - 1))];
  compare(pair, first, second, active);
  return pair;
}

export function isOtherField({ typicalDifference, scaleSpread }: PairSpectra): boolean {
  return !(typicalDifference < otherFieldSigma && scaleSpread > 0 && scaleSpread < otherFieldSpread);
}

function isGood({ flux, variance, flags }: Spectra, at: number): boolean {
  return (flags[at] & UNUSABLE) === 0 && variance[at] > 0 && !Number.isNaN(flux[at]);
}

/** All light of the first frame over all of the second's, fibre by fibre, their median: 1 where no fibre tells. */
function commonScale(first: Spectra, second: Spectra, active: number[]): number {
  const ratios = active.flatMap((row) => {
    const { ratio, error } = ratioOf(first, second, row, 0, first.nx);
    return error * tellingSignal < ratio ? [ratio] : [];
  });
  return ratios.length > 0 ? median(ratios) : 1;
}

/** s(x) of one fibre as a Legendre series, through ratios of the light in blocks of columns: sums, since a ratio of
 * single faint points is biased. */
function fibreScale(first: Spectra, second: Spectra, row: number, common: number): Float64Array {
  const [t, ratios, weights]: number[][] = [[], [], []];
  for (let x0 = 0; x0 < first.nx; x0 += blockColumns) {
    const x1 = Math.min(x0 + blockColumns, first.nx);
    const { ratio, error } = ratioOf(first, second, row, x0, x1);
    if (!(error * tellingSignal < ratio)) continue;
    t.push(legendreArgument((x0 + x1 - 1) / 2, first.nx));
    ratios.push(ratio);
    weights.push(1 / (error * error));
  }
  if (t.length >= 3 * nTerm) return legendreFitClipped(t, ratios, weights, nTerm, clipSigma, 5).coef;
  const { ratio, error } = ratioOf(first, second, row, 0, first.nx);
  return Float64Array.of(error * tellingSignal < ratio ? ratio : common);
}

/** Light of the first over that of the second in columns x0 … x1 − 1 where both are good. */
function ratioOf(first: Spectra, second: Spectra, row: number, x0: number, x1: number) {
  let [a, b, varianceA, varianceB] = [0, 0, 0, 0];
  for (let at = row * first.nx + x0; at < row * first.nx + x1; at++) {
    if (!isGood(first, at) || !isGood(second, at) || ((first.flags[at] | second.flags[at]) & 1) !== 0) continue;
    a += first.flux[at];
    b += second.flux[at];
    varianceA += first.variance[at];
    varianceB += second.variance[at];
  }
  const ratio = a / b;
  return { ratio, error: Math.sqrt(varianceA + ratio * ratio * varianceB) / b };
}

function takeChanges({ scaled, change }: PairSpectra, first: ArrayLike<number>, from: number): void {
  const nx = first.length;
  for (let x = 0; x < nx; x++) {
    let [least, most] = [Number.POSITIVE_INFINITY, Number.NEGATIVE_INFINITY];
    for (let u = Math.max(x - changeColumns, 0); u <= Math.min(x + changeColumns, nx - 1); u++) {
      const both = Math.min(first[u], scaled[from + u]);
      if (Number.isNaN(both)) continue;
      least = Math.min(least, both);
      most = Math.max(most, both);
    }
    change[from + x] = Math.max(most - least, 0);
  }
}

/** Differences of the spectra: typical ones, and η from shortfalls at sharp changes. */
function compare(pair: PairSpectra, first: Spectra, second: Spectra, active: number[]): void {
  const [differences, shares]: number[][] = [[], []];
  active.forEach((row, k) => {
    for (let x = 0; x < first.nx; x++) {
      const [i, at] = [k * first.nx + x, row * first.nx + x];
      if (!isGood(first, at) || !isGood(second, at)) continue;
      const difference = first.flux[at] - pair.scaled[i];
      const variance = first.variance[at] + pair.scaledVariance[i];
      differences.push(Math.abs(difference) / Math.sqrt(variance));
      const { [i]: change } = pair.change;
      if (difference >= 0 || change * change < tellingChange * tellingChange * variance) continue;
      const beyond = difference * difference - kappa * kappa * variance;
      shares.push(beyond > 0 ? Math.sqrt(beyond) / change : 0);
    }
  });
  if (differences.length > 0) pair.typicalDifference = median(differences);
  if (shares.length < 100) return;
  const sorted = Float64Array.from(shares).sort();
  const measured = (margin * sorted[Math.floor(changeQuantile * (sorted.length - 1))]) / kappa;
  pair.lineError = Math.max(leastLineError, measured);
}
