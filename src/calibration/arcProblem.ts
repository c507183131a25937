/** An arc and a list of lines, made ready to be matched.
 *
 * Columns become t in [−1, 1], wavelengths u = (λ − middle)/half of the approximate range, so that a range that is right reads
 * u = t. Whatever its direction and size, a reading of the arc is
 *
 *     u(t) = a₀ + a₁ [t + q P₂(t) + c P₃(t)],   |a₀| ≤ 0.8,  0.7 ≤ |a₁| ≤ 1.4,  |q| ≤ 0.06,  |c| ≤ 0.015
 *
 * shifted by up to 30 % of the range, stretched by up to 30 % (of the true one or of the approximate one), or turned round (a₁ < 0);
 * gratings and grisms bend less than q and c allow. */
import { legendreArgument } from "../reference/legendre.js";
import type { LineList } from "./lamps.js";

/** What identification needs to know of a peak of the arc; all else may be absent. */
export interface IdentifiablePeak {
  /** Column, from 0, and its error, px. */
  x: number;
  error: number;
  /** e⁻ of all of it, or anything proportional. */
  electrons: number;
  /** px */
  fwhm?: number;
}

export const LIMITS = { shift: 0.8, shortest: 0.7, longest: 1.4, curve: 0.06, cubic: 0.015 };

export interface ArcProblem {
  nx: number;
  /** t of one px. */
  pixel: number;
  /** Å: λ = middle + half · u; `half` is negative where the approximate range falls. */
  middle: number;
  half: number;
  /** nPeak: place, error in px, and rank by light in [0, 1], 1 the brightest. */
  t: Float64Array;
  error: Float64Array;
  peakRank: Float64Array;
  /** nLine within reach, rising in u: place, index in the list, how readily it is seen (mean 1), rank within its lamp in [0, 1]. */
  u: Float64Array;
  index: Int32Array;
  weight: Float64Array;
  lineRank: Float64Array;
  /** nLine + 1: sums of the weights before each line. */
  weightBelow: Float64Array;
  /** nLine: room for matching, the peak that a line is given to. */
  owner: Int32Array;
}

export function arcProblem(
  peaks: readonly IdentifiablePeak[],
  lines: LineList,
  [first, last]: readonly [number, number],
  nx: number,
): ArcProblem {
  const middle = (first + last) / 2;
  const half = (last - first) / 2;
  const reach = LIMITS.shift + LIMITS.longest * (1 + LIMITS.curve + LIMITS.cubic);
  const within = Array.from(lines.wavelength, (wavelength, index) => ({ index, u: (wavelength - middle) / half }))
    .filter(({ u }) => Math.abs(u) <= reach)
    .sort((a, b) => a.u - b.u);
  const index = Int32Array.from(within, (line) => line.index);
  const weight = visibility(index, lines);
  const weightBelow = new Float64Array(index.length + 1);
  for (let j = 0; j < index.length; j++) weightBelow[j + 1] = weightBelow[j] + weight[j];
  return {
    nx,
    pixel: 2 / (nx - 1),
    middle,
    half,
    t: Float64Array.from(peaks, (peak) => legendreArgument(peak.x, nx)),
    error: Float64Array.from(peaks, (peak) => (Number.isFinite(peak.error) ? peak.error : 0)),
    peakRank: ranks(Float64Array.from(peaks, (peak) => peak.electrons)),
    u: Float64Array.from(within, (line) => line.u),
    index,
    weight,
    lineRank: ranksByLamp(index, lines),
    weightBelow,
    owner: new Int32Array(index.length),
  };
}

/** How readily each line is seen, mean 1: with the square root of its strength beside its lamp's others, within bounds, since strengths are
 * rough and lamps burn differently. */
function visibility(index: Int32Array, { strength, lamp }: LineList): Float64Array {
  const weight = new Float64Array(index.length).fill(1);
  for (const members of byLamp(index, lamp)) {
    const known = members.filter((j) => strength[index[j]] > 0);
    const mean = known.reduce((sum, j) => sum + Math.sqrt(strength[index[j]]), 0) / known.length;
    for (const j of known) weight[j] = Math.min(3, Math.max(0.15, Math.sqrt(strength[index[j]]) / mean));
  }
  const mean = weight.reduce((sum, w) => sum + w, 0) / weight.length;
  return weight.map((w) => w / mean);
}

function ranksByLamp(index: Int32Array, { strength, lamp }: LineList): Float64Array {
  const out = new Float64Array(index.length).fill(0.5);
  for (const members of byLamp(index, lamp)) {
    const values = ranks(Float64Array.from(members, (j) => strength[index[j]]));
    members.forEach((j, i) => {
      out[j] = values[i];
    });
  }
  return out;
}

function byLamp(index: Int32Array, lamp: readonly string[]): number[][] {
  const members = new Map<string, number[]>();
  index.forEach((line, j) => {
    const name = lamp[line];
    if (!members.has(name)) members.set(name, []);
    members.get(name)?.push(j);
  });
  return [...members.values()];
}

/** Share of the others below each value, equal ones and unknown ones counting half. */
function ranks(values: Float64Array): Float64Array {
  const known = values.filter((value) => !Number.isNaN(value)).sort();
  return values.map((value) => {
    if (Number.isNaN(value)) return 0.5;
    let below = 0;
    let equal = 0;
    for (const other of known) {
      if (other < value) below++;
      else if (other === value) equal++;
    }
    return (below + equal / 2) / known.length;
  });
}

/** How much more likely a peak of that brightness is this line's than any line's: the copula of Farlie, Gumbel & Morgenstern, a density with
 * uniform margins, so that it never makes chance look better than chance. */
export function brightnessRatio(peakRank: number, lineRank: number): number {
  return 1 + 0.8 * (2 * peakRank - 1) * (2 * lineRank - 1);
}
