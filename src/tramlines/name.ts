/** Which ribbon of light is which fibre: peaks of a cut are matched to the slit layout by the best of all alignments
 * (dynamic programming over slit positions × peaks), and the score of every other reading is known too, so that a
 * close call is refused instead of guessed.
 *
 * Distances are measured in local pitches, which takes out scale and slow distortion; offset and shift by whole
 * fibres are then what the alignment decides, by gaps, slit ends and dead fibres. Scores are natural logarithms of
 * likelihood, roughly: 0 is a perfect match. */
import { medianOf } from "../detector/clip.js";
import { NamingError } from "./errors.js";

/** The slit as the spectrograph file tells it; slit positions count from 1, from low y upwards. */
export interface SlitLayout {
  blocks: number[];
  /** px */
  pitch: number;
  /** px beside one pitch, between blocks. */
  gap: number | number[];
  dead: number[];
  sky: number[];
}

/** What naming needs to know of a peak. */
export interface NamedLight {
  /** px */
  position: number;
  /** e⁻ of all its light, or anything proportional to it. */
  light: number;
}

export interface Naming {
  /** A slit position a peak, from 1; 0 for light that is no fibre's. */
  slitPosition: Int32Array;
  nFibre: number;
  /** nFibre, from 1. */
  block: Int32Array;
  /** nFibre: y in the cut; where no peak is, from its neighbours. */
  centre: Float64Array;
  /** nFibre: index of the peak, or −1. */
  peak: Int32Array;
  score: number;
  /** Best score of a reading in which some fibre has another number; −∞ when there is none. */
  runnerUpScore: number;
  readings: string[];
  assumptions: string[];
  warnings: string[];
}

/** Readings closer than this are not told apart: a factor e⁸ ≈ 3000 in likelihood. */
const CLEAR_MARGIN = 8;
/** Costs, in the same logarithms. */
const MISSING_FIRST = 5;
const MISSING_NEXT = 0.7;
const EXTRA_BRIGHT = 6;
const EXTRA_DIM = 2.5;
const LIGHT_IN_DEAD = 5;
const DIM_IN_DEAD = 2;
/** Below this share of the median a peak counts as dim. */
const DIM_SHARE = 0.2;
const MAX_EXTRAS_SKIPPED = 3;

/** @throws NamingError when the layout does not fit, or when two readings fit about as well. */
export function nameFibres(peaks: NamedLight[], layout: SlitLayout, name = "the flat"): Naming {
  const slit = unfold(layout);
  const ruler = measureInPitches(peaks, layout.pitch, name);
  const alignment = align(slit, ruler, peaks);
  judge(alignment, slit, peaks, name);
  return describe(alignment, slit, peaks, ruler, name);
}

interface Slit {
  n: number;
  /** n: distance from the first position, in pitches. */
  at: Float64Array;
  /** n: gaps, in pitches, passed from the first position on. */
  gapsPassed: Float64Array;
  block: Int32Array;
  dead: Uint8Array;
  /** n + 1: positions listed as lit below this index. */
  litBelow: Int32Array;
}

function unfold(layout: SlitLayout): Slit {
  const n = layout.blocks.reduce((sum, count) => sum + count, 0);
  const gaps = layout.blocks.slice(1).map((_, b) => (typeof layout.gap === "number" ? layout.gap : layout.gap[b]));
  if (n < 1 || !(layout.pitch > 0) || gaps.some((gap) => !(gap >= 0))) {
    throw new NamingError(
      `The slit layout has ${layout.blocks.length} blocks with ${n} fibres, pitch ${layout.pitch} px and gaps [${gaps.join(", ")}] px; ` +
        "it needs fibres, a pitch over 0 and one gap of 0 or more between each two blocks.",
    );
  }
  const wrong = layout.dead.find((position) => !(position >= 1 && position <= n));
  if (wrong !== undefined) {
    throw new NamingError(`The slit layout lists position ${wrong} as dead, but its positions run from 1 to ${n}.`);
  }
  const slit: Slit = {
    n,
    at: new Float64Array(n),
    gapsPassed: new Float64Array(n),
    block: new Int32Array(n),
    dead: new Uint8Array(n),
    litBelow: new Int32Array(n + 1),
  };
  for (const position of layout.dead) slit.dead[position - 1] = 1;
  let i = 0;
  layout.blocks.forEach((count, b) => {
    for (let k = 0; k < count; k++, i++) {
      const gap = k === 0 && b > 0 ? gaps[b - 1] / layout.pitch : 0;
      slit.at[i] = i === 0 ? 0 : slit.at[i - 1] + 1 + gap;
      slit.gapsPassed[i] = (i === 0 ? 0 : slit.gapsPassed[i - 1]) + gap;
      slit.block[i] = b + 1;
      slit.litBelow[i + 1] = slit.litBelow[i] + (slit.dead[i] ? 0 : 1);
    }
  });
  return slit;
}

interface Ruler {
  /** nPeak: distance from the first peak, in local pitches. */
  at: Float64Array;
  /** nPeak: px. */
  pitch: Float64Array;
}

/** Spacings within this share of the pitch are taken as one pitch. */
const PITCH_RANGE = 0.16;

/** The pitch of neighbouring fibres around each peak, and the peaks' distances in it. */
function measureInPitches(peaks: NamedLight[], layoutPitch: number, name: string): Ruler {
  const spacing = peaks.slice(1).map((peak, j) => peak.position - peaks[j].position);
  const singles = spacing.filter((d) => Math.abs(d / layoutPitch - 1) < PITCH_RANGE);
  if (peaks.length > 1 && singles.length < 0.4 * spacing.length) {
    throw new NamingError(
      `${name}: neighbouring ribbons of light stand ${medianOf(spacing).toFixed(2)} px apart (median of ${spacing.length}), ` +
        `but the slit layout's pitch is ${layoutPitch} px; correct the pitch in the spectrograph file.`,
    );
  }
  const overall = singles.length > 0 ? medianOf(singles) : layoutPitch;
  const pitch = Float64Array.from(peaks, (_, j) => {
    const near = spacing.slice(Math.max(0, j - 12), j + 12).filter((d) => Math.abs(d / overall - 1) < 0.12);
    return near.length >= 5 ? medianOf(near) : overall;
  });
  const at = new Float64Array(peaks.length);
  for (let j = 1; j < peaks.length; j++) at[j] = at[j - 1] + (2 * spacing[j - 1]) / (pitch[j - 1] + pitch[j]);
  return { at, pitch };
}

interface Alignment {
  /** nPeak: slit index, or −1. */
  slitIndex: Int32Array;
  score: number;
  /** nPeak: best score with that peak on another slit position, and which. */
  otherScore: Float64Array;
  otherIndex: Int32Array;
}

/** All alignments at once: forward[i, j] is the best score of everything up to peak j on position i, backward[i, j] of
 * everything after; their sum is the best score of any reading that puts peak j on position i. */
function align(slit: Slit, ruler: Ruler, peaks: NamedLight[]): Alignment {
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

/** Refuses what does not fit and what can be read in two ways. */
function judge(alignment: Alignment, slit: Slit, peaks: NamedLight[], name: string): void {
  const { slitIndex, otherScore, otherIndex, score } = alignment;
  const nLit = slit.litBelow[slit.n];
  const nNamed = slitIndex.filter((i) => i >= 0).length;
  const typical = medianOf(peaks.map((peak) => peak.light));
  const strangers = peaks.filter((peak, j) => slitIndex[j] < 0 && peak.light >= DIM_SHARE * typical);
  if (nNamed < 3 || nNamed < 0.25 * nLit || strangers.length > Math.max(1, 0.02 * slit.n)) {
    const where = strangers.length > 0 ? ` (light that no fibre explains at y = ${positions(strangers)})` : "";
    throw new NamingError(
      `${name}: ${peaks.length} ribbons of light were found, of which the slit layout's ${nLit} lit fibres explain ${nNamed}${where}; ` +
        "correct blocks, gap and dead fibres in the spectrograph file, or give another flat.",
    );
  }
  let closest = -1;
  for (let j = 0; j < peaks.length; j++) {
    if (slitIndex[j] >= 0 && (closest < 0 || otherScore[j] > otherScore[closest])) closest = j;
  }
  if (score - otherScore[closest] >= CLEAR_MARGIN) return;
  const close = peaks.flatMap((_, j) => (slitIndex[j] >= 0 && score - otherScore[j] < CLEAR_MARGIN ? [j] : []));
  const [first, last] = [close[0], close[close.length - 1]];
  const range =
    close.length === 1
      ? `the fibre at y = ${peaks[first].position.toFixed(1)}`
      : `the ${close.length} fibres from y = ${peaks[first].position.toFixed(1)} to ${peaks[last].position.toFixed(1)}`;
  throw new NamingError(
    `${name}: ${range} can be read as ${rangeOf(slitIndex[first], slitIndex[last])} (score ${score.toFixed(1)}) or as ` +
      `${rangeOf(otherIndex[first], otherIndex[last])} (score ${otherScore[closest].toFixed(1)}), too close to decide: list all dead ` +
      "fibres in the spectrograph file, or give a flat in which the whole slit is lit and on the detector.",
  );
}

function rangeOf(first: number, last: number): string {
  return first === last ? `${first + 1}` : `${first + 1} … ${last + 1}`;
}

function positions(peaks: NamedLight[]): string {
  const shown = peaks.slice(0, 4).map((peak) => peak.position.toFixed(1));
  return shown.join(", ") + (peaks.length > 4 ? `, … (${peaks.length} in all)` : "");
}

function describe(alignment: Alignment, slit: Slit, peaks: NamedLight[], ruler: Ruler, name: string): Naming {
  const { slitIndex, score, otherScore } = alignment;
  const peak = new Int32Array(slit.n).fill(-1);
  slitIndex.forEach((i, j) => {
    if (i >= 0) peak[i] = j;
  });
  const runnerUpScore = otherScore.reduce((best, value) => Math.max(best, value), Number.NEGATIVE_INFINITY);
  const warnings: string[] = [];
  const lit = listOf((i) => slit.dead[i] === 1 && peak[i] >= 0, slit.n);
  if (lit.length > 0) {
    warnings.push(
      `${name}: light in ${fibres(lit)}, listed as dead in the slit layout; correct the list if the light is real.`,
    );
  }
  const unseen = listOf((i) => slit.dead[i] === 0 && peak[i] < 0, slit.n);
  if (unseen.length > 0) {
    warnings.push(
      `${name}: no light in ${fibres(unseen)}, not listed as dead in the slit layout; they are taken as dead.`,
    );
  }
  const strangers = peaks.filter((_, j) => slitIndex[j] < 0);
  if (strangers.length > 0)
    warnings.push(`${name}: light that is no fibre's at y = ${positions(strangers)}; it was left unnamed.`);
  return {
    slitPosition: slitIndex.map((i) => i + 1),
    nFibre: slit.n,
    block: slit.block,
    centre: fillCentres(slit, peaks, peak, ruler),
    peak,
    score,
    runnerUpScore,
    readings: [
      `all positions as named: score ${score.toFixed(1)}`,
      Number.isFinite(runnerUpScore)
        ? `next best reading, in which some fibre has another number: score ${runnerUpScore.toFixed(1)}`
        : "no other reading is possible",
    ],
    assumptions: [],
    warnings,
  };
}

/** Where the positions without a peak must lie: between the named neighbours in proportion, beyond them by the pitch. */
function fillCentres(slit: Slit, peaks: NamedLight[], peak: Int32Array, ruler: Ruler): Float64Array {
  const named = listOf((i) => peak[i] >= 0, slit.n);
  return Float64Array.from({ length: slit.n }, (_, i) => {
    if (peak[i] >= 0) return peaks[peak[i]].position;
    const above = named.find((k) => k > i);
    const below = named.filter((k) => k < i).pop();
    if (above !== undefined && below !== undefined) {
      const share = (slit.at[i] - slit.at[below]) / (slit.at[above] - slit.at[below]);
      return peaks[peak[below]].position + share * (peaks[peak[above]].position - peaks[peak[below]].position);
    }
    const near = (above ?? below) as number;
    return peaks[peak[near]].position + (slit.at[i] - slit.at[near]) * ruler.pitch[peak[near]];
  });
}

function listOf(holds: (i: number) => boolean, n: number): number[] {
  return Array.from({ length: n }, (_, i) => i).filter(holds);
}

/** "fibre 7" or "fibres 3, 8–12", from indices. */
export function fibres(indices: number[]): string {
  const runs: string[] = [];
  for (let k = 0; k < indices.length; k++) {
    const from = k;
    while (indices[k + 1] === indices[k] + 1) k++;
    runs.push(from === k ? `${indices[k] + 1}` : `${indices[from] + 1}–${indices[k] + 1}`);
  }
  const shown = runs.length > 8 ? `${runs.slice(0, 8).join(", ")}, …` : runs.join(", ");
  return `fibre${indices.length === 1 ? "" : "s"} ${shown}`;
}

/** Without a layout: what is found is numbered from low y, and every hole wider than a pitch parts two blocks. No number
 * is kept for a fibre that might be dead in a hole; what was assumed is said. */
export function numberFibres(peaks: NamedLight[], name = "the flat"): Naming {
  const spacing = peaks.slice(1).map((peak, j) => peak.position - peaks[j].position);
  const narrow = [...spacing].sort((a, b) => a - b)[Math.floor(spacing.length / 4)] ?? 1;
  const pitch = medianOf(spacing.filter((d) => d < 1.4 * narrow)) || 1;
  const block = new Int32Array(peaks.length).fill(1);
  const whole: number[] = [];
  spacing.forEach((d, j) => {
    const isHole = d > 1.35 * pitch;
    block[j + 1] = block[j] + (isHole ? 1 : 0);
    if (isHole && Math.abs(d / pitch - Math.round(d / pitch)) < 0.12) whole.push(j);
  });
  const nBlock = block.length > 0 ? block[block.length - 1] : 0;
  const assumptions = [
    `${name}: no slit layout was given, so the ${peaks.length} fibres found are numbered from low y, in ${nBlock} blocks parted by ` +
      "holes wider than a pitch; a dead or unlit fibre has no number.",
  ];
  if (whole.length > 0) {
    assumptions.push(
      `${name}: the holes after ${fibres(whole)} are whole pitches wide and could be dead fibres rather than gaps; no number was kept ` +
        "for them, give the slit layout if they are.",
    );
  }
  return {
    slitPosition: Int32Array.from(peaks, (_, j) => j + 1),
    nFibre: peaks.length,
    block,
    centre: Float64Array.from(peaks, (peak) => peak.position),
    peak: Int32Array.from(peaks, (_, j) => j),
    score: 0,
    runnerUpScore: Number.NEGATIVE_INFINITY,
    readings: ["numbered as found, without a slit layout"],
    assumptions,
    warnings: [],
  };
}
