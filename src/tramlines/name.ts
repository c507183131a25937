/** Which ribbon of light is which fibre: peaks of a cut are matched to the slit layout by the best of all alignments
 * (dynamic programming over slit positions × peaks), and the score of every other reading is known too, so that a
 * close call is refused instead of guessed.
 *
 * Distances are measured in local pitches, which takes out scale and slow distortion; offset and shift by whole
 * fibres are then what the alignment decides, by gaps, slit ends and dead fibres. Scores are natural logarithms of
 * likelihood, roughly: 0 is a perfect match. */
import { medianOf } from "../detector/clip.js";
import { type Alignment, align, DIM_SHARE, type NamedLight, type Ruler } from "./align.js";
import { NamingError } from "./errors.js";
import { type Slit, type SlitLayout, unfold } from "./layout.js";

export type { SlitLayout } from "./layout.js";

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
/** The same when the reading leaves the slit's first or last fibre dark without the list saying so: one entry of the list of dead
 * fibres that is off by one makes a reading one fibre off better by 10 (light in a dead fibre, and a dark one), and then
 * only the slit's end speaks against it. */
const CLEAR_MARGIN_AT_ENDS = 10.5;
/** @throws NamingError when the layout does not fit, or when two readings fit about as well. */
export function nameFibres(peaks: NamedLight[], layout: SlitLayout, name = "the flat"): Naming {
  const slit = unfold(layout);
  const ruler = measureInPitches(peaks, layout.pitch, name);
  const alignment = align(slit, ruler, peaks);
  judge(alignment, slit, peaks, name);
  return describe(alignment, slit, peaks, ruler, name);
}

/** Spacings within this share of the pitch are taken as one pitch. */
const PITCH_RANGE = 0.16;

/** The pitch of neighbouring fibres around each peak, and the peaks' distances in it. */
function measureInPitches(peaks: NamedLight[], layoutPitch: number, name: string): Ruler {
  const spacing = peaks.slice(1).map((peak, j) => peak.position - peaks[j].position);
  const singles = spacing.filter((d) => Math.abs(d / layoutPitch - 1) < PITCH_RANGE);
  if (peaks.length > 1 && singles.length < 0.4 * spacing.length) {
    const pitches = medianOf(spacing) / layoutPitch;
    if (pitches > 1.5 && Math.abs(pitches - Math.round(pitches)) < 0.15) {
      throw new NamingError(
        `${name}: the ${peaks.length} ribbons of light stand ${Math.round(pitches)} pitches apart in the median, so that most fibres are ` +
          "dark or much fainter than others; give a fibre flat in which all fibres are lit alike.",
      );
    }
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

/** Refuses what does not fit and what can be read in two ways. */
function judge(alignment: Alignment, slit: Slit, peaks: NamedLight[], name: string): void {
  const { slitIndex, otherScore, otherIndex, score } = alignment;
  const nLit = slit.litBelow[slit.n];
  const nNamed = slitIndex.filter((i) => i >= 0).length;
  const typical = medianOf(peaks.map((peak) => peak.light));
  const strangers = peaks.filter((peak, j) => slitIndex[j] < 0 && peak.light >= DIM_SHARE * typical);
  if (nNamed < Math.min(3, nLit) || nNamed < 0.25 * nLit || strangers.length > Math.max(1, 0.02 * slit.n)) {
    const where = strangers.length > 0 ? ` (light that no fibre explains at y = ${positions(strangers)})` : "";
    throw new NamingError(
      `${name}: ${peaks.length} ribbons of light were found, of which the slit layout's ${nLit} lit fibres explain ${nNamed}${where}; ` +
        "correct blocks, gap and dead fibres in the spectrograph file, or give another flat.",
    );
  }
  refuseContradictions(alignment, slit, peaks, typical, name);
  let closest = -1;
  for (let j = 0; j < peaks.length; j++) {
    if (slitIndex[j] >= 0 && (closest < 0 || otherScore[j] > otherScore[closest])) closest = j;
  }
  const isOneOff = Math.abs(otherIndex[closest] - slitIndex[closest]) === 1;
  const margin = isOneOff && isEndDark(alignment, slit) ? CLEAR_MARGIN_AT_ENDS : CLEAR_MARGIN;
  if (score - otherScore[closest] >= margin) return;
  const close = peaks.flatMap((_, j) => (slitIndex[j] >= 0 && score - otherScore[j] < margin ? [j] : []));
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

/** Whether the first or the last fibre that should shine does not. */
function isEndDark({ slitIndex }: Alignment, { dead, n }: Slit): boolean {
  const named = slitIndex.filter((i) => i >= 0);
  const [first, last] = [dead.indexOf(0), dead.lastIndexOf(0)];
  return n > 0 && (!named.includes(first) || !named.includes(last));
}

/** Light is a fibre's when it stands this near to one pitch from a named one. */
const FIBRE_LIKE = 0.25;

/** Two signs of a layout that is off by one, however well the rest fits: bright light one pitch from a named fibre where the
 * layout has none, and light in a fibre listed as dead beside a dark one that is not. */
function refuseContradictions(
  { slitIndex }: Alignment,
  slit: Slit,
  peaks: NamedLight[],
  typical: number,
  name: string,
): void {
  const spacing = medianOf(peaks.slice(1).map((peak, j) => peak.position - peaks[j].position));
  const isNamedAt = (j: number, y: number) =>
    slitIndex[j] >= 0 && Math.abs(Math.abs(peaks[j].position - y) / spacing - 1) < FIBRE_LIKE;
  const extra = peaks.find(
    (peak, j) =>
      slitIndex[j] < 0 &&
      peak.light >= DIM_SHARE * typical &&
      (isNamedAt(j - 1, peak.position) || isNamedAt(j + 1, peak.position)),
  );
  if (extra !== undefined) {
    throw new NamingError(
      `${name}: light like a fibre's at y = ${extra.position.toFixed(1)}, one pitch beside a fibre, where the slit layout has none; ` +
        "correct the counts of fibres in the blocks in the spectrograph file.",
    );
  }
  const isLit = new Uint8Array(slit.n);
  for (const i of slitIndex) if (i >= 0) isLit[i] = 1;
  const isDark = (i: number) => i >= 0 && i < slit.n && isLit[i] === 0 && slit.dead[i] === 0;
  const swapped = slit.dead.findIndex((dead, i) => dead === 1 && isLit[i] === 1 && (isDark(i - 1) || isDark(i + 1)));
  if (swapped >= 0) {
    const dark = isDark(swapped - 1) ? swapped : swapped + 2;
    throw new NamingError(
      `${name}: fibre ${swapped + 1} is listed as dead but has light, and fibre ${dark} beside it is dark but not listed; correct the ` +
        "list of dead fibres (positions count from 1, from low y upwards) or the counts of fibres in the blocks.",
    );
  }
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
