/** Peaks of a cut against slit positions: the best of all alignments by dynamic programming (forward and backward, as
 * Needleman & Wunsch 1970 for sequences), and for each peak the best alignment that gives it another position.
 *
 * Scores are natural logarithms of likelihood, roughly: 0 is a perfect match. */
import { medianOf } from "../detector/clip.js";
import type { Slit } from "./layout.js";

/** What naming needs to know of a peak. */
export interface NamedLight {
  /** px */
  position: number;
  /** e⁻ of all its light, or anything proportional to it. */
  light: number;
}

/** The peaks' places, with scale and slow distortion taken out. */
export interface Ruler {
  /** nPeak: distance from the first peak, in local pitches. */
  at: Float64Array;
  /** nPeak: px. */
  pitch: Float64Array;
}

/** Costs, in the same logarithms. */
const MISSING_FIRST = 5;
const MISSING_NEXT = 0.7;
const EXTRA_BRIGHT = 6;
const EXTRA_DIM = 2.5;
const LIGHT_IN_DEAD = 5;
const DIM_IN_DEAD = 2;
/** Below this share of the median a peak counts as dim. */
export const DIM_SHARE = 0.2;
const MAX_EXTRAS_SKIPPED = 3;

export interface Alignment {
  /** nPeak: slit index, or −1. */
  slitIndex: Int32Array;
  score: number;
  /** nPeak: best score with that peak on another slit position, and which. */
  otherScore: Float64Array;
  otherIndex: Int32Array;
}

/** All alignments at once: forward[i, j] is the best score of everything up to peak j on position i, backward[i, j] of
 * everything after; their sum is the best score of any reading that puts peak j on position i. */
export function align(slit: Slit, ruler: Ruler, peaks: NamedLight[]): Alignment {
  const nPeak = peaks.length;
  const size = slit.n * nPeak;
  const forward = new Float64Array(size).fill(Number.NEGATIVE_INFINITY);
  const backward = new Float64Array(size).fill(Number.NEGATIVE_INFINITY);
  const from = new Int32Array(size).fill(-1);
  const typical = medianOf(peaks.map((peak) => peak.light));
  const dim = peaks.map((peak) => peak.light < DIM_SHARE * typical);
  const extraBelow = new Float64Array(nPeak + 1);
  for (let j = 0; j < nPeak; j++) extraBelow[j + 1] = extraBelow[j] + (dim[j] ? EXTRA_DIM : EXTRA_BRIGHT);
  const emission = (i: number, j: number) => (slit.dead[i] ? -(dim[j] ? DIM_IN_DEAD : LIGHT_IN_DEAD) : 0);

  const eachStep = (i: number, j: number, visit: (i2: number, j2: number, score: number) => void) => {
    for (let j2 = j + 1; j2 < Math.min(nPeak, j + 2 + MAX_EXTRAS_SKIPPED); j2++) {
      const distance = ruler.at[j2] - ruler.at[j];
      const tolerance = Math.max(0.45, 0.035 * distance);
      for (let i2 = firstFrom(slit.at, slit.at[i] + distance - tolerance, i + 1); i2 < slit.n; i2++) {
        const expected = slit.at[i2] - slit.at[i];
        if (expected > distance + tolerance) break;
        const gaps = slit.gapsPassed[i2] - slit.gapsPassed[i];
        const sigma2 = 0.06 ** 2 + (0.012 * expected) ** 2 + (gaps > 0 ? (0.06 + 0.08 * gaps) ** 2 : 0);
        const off = Math.min(10, (0.5 * (expected - distance) ** 2) / sigma2);
        visit(i2, j2, -off - missingCost(slit, i + 1, i2) - (extraBelow[j2] - extraBelow[j + 1]));
      }
    }
  };

  for (let j = 0; j < nPeak; j++) {
    for (let i = 0; i < slit.n; i++) {
      const here = i * nPeak + j;
      const start = -missingCost(slit, 0, i) - extraBelow[j];
      const best = Math.max(start, forward[here]);
      if (best === start) from[here] = -1;
      forward[here] = best + emission(i, j);
      eachStep(i, j, (i2, j2, score) => {
        const there = i2 * nPeak + j2;
        if (forward[here] + score > forward[there]) {
          forward[there] = forward[here] + score;
          from[there] = here;
        }
      });
    }
  }
  for (let j = nPeak - 1; j >= 0; j--) {
    for (let i = slit.n - 1; i >= 0; i--) {
      const here = i * nPeak + j;
      let best = -missingCost(slit, i + 1, slit.n) - (extraBelow[nPeak] - extraBelow[j + 1]);
      eachStep(i, j, (i2, j2, score) => {
        best = Math.max(best, score + emission(i2, j2) + backward[i2 * nPeak + j2]);
      });
      backward[here] = best;
    }
  }
  const end = (j: number, i: number) => -missingCost(slit, i + 1, slit.n) - (extraBelow[nPeak] - extraBelow[j + 1]);
  let last = -1;
  let score = -missingCost(slit, 0, slit.n) - extraBelow[nPeak];
  for (let here = 0; here < size; here++) {
    const total = forward[here] + end(here % nPeak, Math.floor(here / nPeak));
    if (total > score) {
      score = total;
      last = here;
    }
  }
  const slitIndex = new Int32Array(nPeak).fill(-1);
  for (let here = last; here >= 0; here = from[here]) slitIndex[here % nPeak] = Math.floor(here / nPeak);
  return { slitIndex, score, ...otherReadings(slitIndex, slit.n, forward, backward) };
}

/** For each peak the best score of a reading that gives it another slit position. */
function otherReadings(slitIndex: Int32Array, nFibre: number, forward: Float64Array, backward: Float64Array) {
  const nPeak = slitIndex.length;
  const otherScore = new Float64Array(nPeak).fill(Number.NEGATIVE_INFINITY);
  const otherIndex = new Int32Array(nPeak).fill(-1);
  for (let i = 0; i < nFibre; i++) {
    for (let j = 0; j < nPeak; j++) {
      const score = forward[i * nPeak + j] + backward[i * nPeak + j];
      if (i === slitIndex[j] || slitIndex[j] < 0 || !(score > otherScore[j])) continue;
      otherScore[j] = score;
      otherIndex[j] = i;
    }
  }
  return { otherScore, otherIndex };
}

/** Cost of no light at the positions `from` … `to − 1`: those listed as dead cost nothing; a run costs little more than its
 * first one, since shutters and broken bundles take neighbours together. */
function missingCost(slit: Slit, from: number, to: number): number {
  const n = slit.litBelow[to] - slit.litBelow[from];
  return n > 0 ? MISSING_FIRST + MISSING_NEXT * (n - 1) : 0;
}

/** First index ≥ `low` with sorted[index] ≥ value. */
function firstFrom(sorted: Float64Array, value: number, low: number): number {
  let high = sorted.length;
  while (low < high) {
    const mid = (low + high) >> 1;
    if (sorted[mid] < value) low = mid + 1;
    else high = mid;
  }
  return low;
}
