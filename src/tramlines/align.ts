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

/** All alignments at once: forward[j, i] is the best score of everything up to peak j on position i, backward[j, i] of
 * everything after; their sum is the best score of any reading that puts peak j on position i. */
export function align(slit: Slit, ruler: Ruler, peaks: NamedLight[]): Alignment {
  const nPeak = peaks.length;
  const size = slit.n * nPeak;
  const forward = new Float64Array(size).fill(Number.NEGATIVE_INFINITY);
  const backward = new Float64Array(size).fill(Number.NEGATIVE_INFINITY);
  const from = new Int32Array(size).fill(-1);
  const typical = medianOf(peaks.map((peak) => peak.light));
  const dim = Uint8Array.from(peaks, (peak) => (peak.light < DIM_SHARE * typical ? 1 : 0));
  const extraBelow = new Float64Array(nPeak + 1);
  for (let j = 0; j < nPeak; j++) extraBelow[j + 1] = extraBelow[j] + (dim[j] === 1 ? EXTRA_DIM : EXTRA_BRIGHT);
  const emission = (i: number, j: number) => (slit.dead[i] ? -(dim[j] === 1 ? DIM_IN_DEAD : LIGHT_IN_DEAD) : 0);
  const pairs = new Pairs(slit, ruler, extraBelow);

  for (let j = 0; j < nPeak; j++) {
    for (let i = 0; i < slit.n; i++) {
      const here = j * slit.n + i;
      const start = -missingCost(slit, 0, i) - extraBelow[j];
      const best = Math.max(start, forward[here]);
      if (best === start) from[here] = -1;
      forward[here] = best + emission(i, j);
    }
    pairs.eachNext(j, (i, i2, j2, score) => {
      const there = j2 * slit.n + i2;
      const total = forward[j * slit.n + i] + score;
      if (total > forward[there]) {
        forward[there] = total;
        from[there] = j * slit.n + i;
      }
    });
  }
  const end = (j: number, i: number) => -missingCost(slit, i + 1, slit.n) - (extraBelow[nPeak] - extraBelow[j + 1]);
  for (let j = nPeak - 1; j >= 0; j--) {
    for (let i = 0; i < slit.n; i++) backward[j * slit.n + i] = end(j, i);
    pairs.eachNext(j, (i, i2, j2, score) => {
      const here = j * slit.n + i;
      const total = score + emission(i2, j2) + backward[j2 * slit.n + i2];
      if (total > backward[here]) backward[here] = total;
    });
  }
  let last = -1;
  let score = -missingCost(slit, 0, slit.n) - extraBelow[nPeak];
  for (let i = 0; i < slit.n; i++) {
    for (let j = 0; j < nPeak; j++) {
      const total = forward[j * slit.n + i] + end(j, i);
      if (total > score) {
        score = total;
        last = j * slit.n + i;
      }
    }
  }
  const slitIndex = new Int32Array(nPeak).fill(-1);
  for (let here = last; here >= 0; here = from[here]) slitIndex[Math.floor(here / slit.n)] = here % slit.n;
  return { slitIndex, score, ...otherReadings(slitIndex, slit.n, forward, backward) };
}

/** Named peaks that may follow each other: j on position i, and the next one on the next position that has light. */
class Pairs {
  constructor(
    private readonly slit: Slit,
    private readonly ruler: Ruler,
    private readonly extraBelow: Float64Array,
  ) {}

  /** Every peak j2 that may follow j, and both their positions, with the score of what lies between. */
  eachNext(j: number, visit: (i: number, i2: number, j2: number, score: number) => void): void {
    const { slit, ruler, extraBelow } = this;
    const { n, at, gapsPassed } = slit;
    const end = Math.min(ruler.at.length, j + 2 + MAX_EXTRAS_SKIPPED);
    for (let j2 = j + 1; j2 < end; j2++) {
      const distance = ruler.at[j2] - ruler.at[j];
      const tolerance = Math.max(0.45, 0.035 * distance);
      const extras = extraBelow[j2] - extraBelow[j + 1];
      // The first position near enough only rises with i.
      let near = 1;
      for (let i = 0; i < n; i++) {
        const here = at[i];
        near = Math.max(near, i + 1);
        while (near < n && at[near] < here + distance - tolerance) near++;
        for (let i2 = near; i2 < n; i2++) {
          const expected = at[i2] - here;
          if (expected > distance + tolerance) break;
          const gaps = gapsPassed[i2] - gapsPassed[i];
          const sigma2 = 0.06 ** 2 + (0.012 * expected) ** 2 + (gaps > 0 ? (0.06 + 0.08 * gaps) ** 2 : 0);
          const off = Math.min(10, (0.5 * (expected - distance) ** 2) / sigma2);
          visit(i, i2, j2, -off - missingCost(slit, i + 1, i2) - extras);
        }
      }
    }
  }
}

/** For each peak the best score of a reading that gives it another slit position. */
function otherReadings(slitIndex: Int32Array, nFibre: number, forward: Float64Array, backward: Float64Array) {
  const nPeak = slitIndex.length;
  const otherScore = new Float64Array(nPeak).fill(Number.NEGATIVE_INFINITY);
  const otherIndex = new Int32Array(nPeak).fill(-1);
  for (let j = 0; j < nPeak; j++) {
    for (let i = 0; i < nFibre; i++) {
      const score = forward[j * nFibre + i] + backward[j * nFibre + i];
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
