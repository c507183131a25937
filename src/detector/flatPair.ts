/** Gain by photon transfer (Janesick, Scientific Charge-Coupled Devices, 2001).
 *
 * Of two flats A and B, k the ratio of their levels, the difference D = A − k·B is free of structure and pixel
 * response. Should fibres have moved between the two by a hundredth of a pixel, it is not: so two neighbours along
 * dispersion, where a fibre flat is smooth, are subtracted once more, and what is left is noise,
 *
 *     v = σ²(D₁ − D₂) = P / gain + F,   P = A₁ + A₂ + k²·(B₁ + B₂),   F = 2 · readNoise² · (1 + k²)     ADU²
 *
 * The gain is the one that gives (D₁ − D₂) / √v a scatter of 1. With s the mean share of P / gain in v, its error is
 *
 *     (σ(gain) / gain)² = (2 + κ) / n / s² + ((1 − s) / s · 2 σ(readNoise) / readNoise)² + ρ²
 *
 * κ the excess kurtosis that Poisson noise brings, and ρ what neighbouring samples have in common, where that is beyond
 * chance: structure that did not cancel widens the scatter by about as much. */
import type { AmplifierLines } from "./amplifierLines.js";
import { clippedScatter, medianOf } from "./clip.js";
import type { Measured } from "./headerDisagreements.js";

/** Pixels whose photon noise is less than this many times the read noise's variance are left out. */
const BRIGHT_TIMES_READ = 2;
/** … and those with fewer electrons, so that the noise is nearly Gaussian where it is clipped. */
const FEWEST_ELECTRONS = 50;
export const FEWEST_PIXELS = 500;
/** Neighbours share something when their correlation is beyond so many of its own σ. */
const SURE_SIGMAS = 4;
/** Half-width of the cut that `clippedScatter` makes. */
const CUT = 4;

export interface PairStart {
  /** ADU; NaN when it is not known, and then taken as 0. */
  readNoise: Measured;
  /** e⁻/ADU, to begin with. */
  gain: number;
}

/** Gain (e⁻/ADU) from two flats' lines of the same amplifier; undefined when there is too little light, or when the two
 * do not show the same light. */
export function flatPairGain(one: AmplifierLines, two: AmplifierLines, start: PairStart): Measured | undefined {
  const k = levelRatio(one.values, two.values);
  if (!ofOneLight(one, two, k)) return undefined;
  const read = Number.isFinite(start.readNoise.value) ? start.readNoise.value : 0;
  const floor = 2 * read * read * (1 + k * k);
  let gain = Number.isFinite(start.gain) ? start.gain : 1;
  for (let turn = 0; turn < 60; turn++) {
    const sample = sampleOf(one, two, k, gain, floor);
    if (sample.n < FEWEST_PIXELS) return undefined;
    const { sigma, n } = clippedScatter(sample.pulls);
    // Newton's step: σ² falls with the gain as the share of photon noise.
    const step = (sigma * sigma - 1) / sample.photonShare;
    const next = gain / Math.min(4, Math.max(0.25, 1 + step));
    // Pixels at the edge of the selection may come and go for ever: a hundredth of the error is close enough.
    const relativeError = Math.sqrt((2 + sample.kurtosis) / n) / sample.photonShare;
    const settled =
      Math.abs(next / gain - 1) < 0.01 * relativeError ||
      (turn > 30 && Math.abs(next / gain - 1) < 0.1 * relativeError);
    gain = next;
    if (!settled) continue;
    const fromRead =
      read > 0 ? ((1 - sample.photonShare) / sample.photonShare) * 2 * (start.readNoise.error / read) : 0;
    const shared = sharedByNeighbours(sample, one.run, sigma);
    return { value: gain, error: gain * Math.sqrt(relativeError ** 2 + fromRead ** 2 + shared ** 2) };
  }
  return undefined;
}

interface Sample {
  /** nLine × nPair; NaN where there is too little light. */
  pulls: Float64Array;
  nLine: number;
  nPair: number;
  n: number;
  /** Mean over the sample of the photon noise's share in the variance, and of the kurtosis it brings. */
  photonShare: number;
  kurtosis: number;
}

/** (D₁ − D₂) / √v over disjoint pairs of neighbours along the lines with enough light. */
function sampleOf(one: AmplifierLines, two: AmplifierLines, k: number, gain: number, floor: number): Sample {
  const nPair = one.length >> 1;
  const pulls = new Float64Array(one.nLine * nPair).fill(Number.NaN);
  const [a, b] = [one.values, two.values];
  const faintest = Math.max(BRIGHT_TIMES_READ * floor, FEWEST_ELECTRONS / gain / gain);
  let n = 0;
  let share = 0;
  let kurtosis = 0;
  for (let line = 0; line < one.nLine; line++) {
    for (let pair = 0; pair < nPair; pair++) {
      const i = line * one.length + 2 * pair;
      const photons = (a[i] + a[i + 1] + k * k * (b[i] + b[i + 1])) / gain;
      if (!(photons > faintest)) continue;
      const v = photons + floor;
      pulls[line * nPair + pair] = (a[i] - a[i + 1] - k * (b[i] - b[i + 1])) / Math.sqrt(v);
      n++;
      share += photons / v;
      // Fourth cumulant of N electrons, N/gain⁴ ADU⁴, over the variance's square.
      kurtosis += photons / (gain * gain * v * v);
    }
  }
  return { pulls, nLine: one.nLine, nPair, n, photonShare: share / n, kurtosis: kurtosis / n };
}

/** The larger correlation of samples that are neighbours along or across the lines, when it is beyond chance; else 0. */
function sharedByNeighbours({ pulls, nLine, nPair }: Sample, run: number, sigma: number): number {
  const reach = CUT * sigma;
  const correlation = (step: number, isNeighbour: (at: number) => boolean) => {
    let sum = 0;
    let n = 0;
    for (let at = 0; at + step < pulls.length; at++) {
      const product = pulls[at] * pulls[at + step];
      if (!(Math.abs(pulls[at]) <= reach && Math.abs(pulls[at + step]) <= reach) || !isNeighbour(at)) continue;
      sum += product;
      n++;
    }
    const value = n > 0 ? Math.abs(sum) / n / (sigma * sigma) : 0;
    return value * Math.sqrt(n) > SURE_SIGMAS ? value : 0;
  };
  const along = correlation(1, (at) => (at + 1) % nPair !== 0);
  const across = nLine > 1 ? correlation(nPair, (at) => (Math.floor(at / nPair) + 1) % run !== 0) : 0;
  return Math.max(along, across);
}

/** Ratio of two flats' levels on the brighter half of the pixels. */
function levelRatio(one: Float64Array, two: Float64Array): number {
  const middle = medianOf(two);
  let sumOne = 0;
  let sumTwo = 0;
  for (let i = 0; i < one.length; i++) {
    if (!(two[i] >= middle) || Number.isNaN(one[i])) continue;
    sumOne += one[i];
    sumTwo += two[i];
  }
  return sumTwo > 0 ? sumOne / sumTwo : 1;
}

/** Mean |A − k·B| over A, on sums along the lines that noise hardly moves: fibres that move by a tenth of a pixel stay
 * below 10 %, a fibre flat beside a detector flat or a twilight does not. */
const MOST_UNLIKE = 0.15;
const SUMMED = 8;

function ofOneLight({ values: a, length }: AmplifierLines, { values: b }: AmplifierLines, k: number): boolean {
  let unlike = 0;
  let level = 0;
  for (let line = 0; line < a.length; line += length) {
    for (let start = line; start + SUMMED <= line + length; start += SUMMED) {
      let sum = 0;
      let difference = 0;
      for (let i = start; i < start + SUMMED; i++) {
        sum += a[i];
        difference += a[i] - k * b[i];
      }
      if (!Number.isFinite(difference)) continue;
      unlike += Math.abs(difference);
      level += sum;
    }
  }
  return unlike <= MOST_UNLIKE * level;
}
