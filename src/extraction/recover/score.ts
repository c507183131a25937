/** What came back of the injected light: the frame extracted with it, less the frame extracted without.
 *
 * The frame's own noise cancels in that difference; what is left has the variance v(with) − v(without) exactly, for any linear
 * estimator of least variance (by the Gauss–Markov theorem the covariance of both is the smaller variance), and for a plain sum. */
import { median } from "../../reference/median.js";
import { Flag, type Spectra, UNUSABLE } from "../spectra.js";
import { lineReach, type Pattern } from "./inject.js";

/** Where a point stands to fibres this many times brighter than all the light in it. */
export type Place = "adjacent" | "next but one" | "far";
export const places: Place[] = ["adjacent", "next but one", "far"];
export const brightContrast = 30;

/** Points whose light in the frame alone has any of these say nothing of the injection. */
const spoilt = UNUSABLE | Flag.cosmicRay | Flag.badPixel | Flag.neighbourSaturated;
const farPull = 6;
const fewestPoints = 30;
const sigmaPerMad = 1.482602218505602;
/** A line that lost this much of its light was clipped, flagged or not. */
const clippedShare = 0.2;

export interface CellScore {
  /** Injected continuum, e⁻ per column. */
  from: number;
  to: number;
  place: Place;
  nPoint: number;
  nFibre: number;
  /** (Σ found − Σ known) / Σ known; NaN below 30 points. */
  bias: number;
  /** Its standard error, from how the fibres differ. */
  biasError: number;
  /** Robust standard deviation of (found − known) / σ about 0, σ² the variance that the extraction claims for the added light. */
  pull: number;
  /** Share of the points beyond 5 σ. */
  beyond5Sigma: number;
  /** Share of the points newly flagged as hit by a cosmic ray, though none was added. */
  falselyFlaggedShare: number;
  /** Emission lines, those of them of which a pixel was rejected at the peak, and those that lost over a fifth of their light, beyond
   * 5 σ. */
  nLine: number;
  lineFlaggedShare: number;
  lineClippedShare: number;
}

export interface FibreBias {
  /** From 1. */
  fibre: number;
  bias: number;
  error: number;
}

export interface PatternScore {
  cells: CellScore[];
  /** By active fibre; NaN where points are few. */
  fibres: { bias: number; error: number }[];
}

interface Tally {
  nPoint: number;
  falselyFlagged: number;
  pulls: number[];
  /** By active fibre: Σ known, Σ (found − known), Σ variance. */
  known: Float64Array;
  excess: Float64Array;
  variance: Float64Array;
  lines: { flagged: boolean; clipped: boolean }[];
}

export interface InjectedSpectra {
  without: Spectra;
  added: Spectra;
  /** Rows of the spectra that hold the active fibres. */
  rows: number[];
  /** nActive: where the fibres stand along the slit, in pitches. */
  slit: Float64Array;
  /** nActive × nx, e⁻: the flat's known light. */
  known: Float64Array;
  pattern: Pattern;
}

export function scorePattern(comparison: InjectedSpectra): PatternScore {
  const { without, rows, known, pattern } = comparison;
  const { nx } = without;
  const tallies = places.map(() => emptyTally(rows.length));
  const isPeak = new Uint8Array(nx);
  for (const x of pattern.peaks) isPeak[x] = 1;
  rows.forEach((_, k) => {
    for (let x = 0; x < nx; x++) {
      if (without.flags[rows[k] * nx + x] & spoilt) continue;
      const level = pattern.continuum * known[k * nx + x];
      if (!(level >= pattern.from && level < pattern.to)) continue;
      const tally = tallies[placeOf(comparison, k, x, level)];
      if (isPeak[x]) tallyLine(comparison, k, x, tally);
      else if (pattern.line[x] === 0 && !nearLine(pattern, x)) tallyPoint(comparison, k, x, level, tally);
    }
  });
  const { from, to } = pattern;
  const cells = tallies.map((tally, i): CellScore => ({ from, to, place: places[i], ...cellOf(tally) }));
  return { cells, fibres: rows.map((_, k) => fibreBias(tallies, k)) };
}

function emptyTally(n: number): Tally {
  const sums = () => new Float64Array(n);
  return { nPoint: 0, falselyFlagged: 0, pulls: [], known: sums(), excess: sums(), variance: sums(), lines: [] };
}

/** Index into `places`. Fibres across a gap or a dead one are no neighbours. */
function placeOf(
  { without, rows, slit, known, pattern }: InjectedSpectra,
  k: number,
  x: number,
  level: number,
): number {
  const { nx, flux } = without;
  const own = level + Math.max(flux[rows[k] * nx + x], 0);
  let place = places.indexOf("far");
  for (let i = Math.max(k - 2, 0); i <= Math.min(k + 2, rows.length - 1); i++) {
    const distance = Math.round(Math.abs(slit[i] - slit[k]));
    if (i === k || distance > 2) continue;
    const light = pattern.continuum * known[i * nx + x] + Math.max(flux[rows[i] * nx + x], 0);
    if (light > brightContrast * own) place = Math.min(place, distance - 1);
  }
  return place;
}

function nearLine({ line }: Pattern, x: number): boolean {
  for (let u = Math.max(x - lineReach, 0); u <= Math.min(x + lineReach, line.length - 1); u++) {
    if (line[u] > 0) return true;
  }
  return false;
}

function tallyPoint(
  { without, added, rows }: InjectedSpectra,
  k: number,
  x: number,
  level: number,
  tally: Tally,
): void {
  const at = rows[k] * without.nx + x;
  tally.nPoint++;
  if (added.flags[at] & Flag.cosmicRay) tally.falselyFlagged++;
  const variance = added.variance[at] - without.variance[at];
  if (added.flags[at] & UNUSABLE || !(variance > 0)) return;
  const excess = added.flux[at] - without.flux[at] - level;
  const pull = excess / Math.sqrt(variance);
  if (!Number.isFinite(pull)) return;
  tally.pulls.push(pull);
  // Beyond a gross outlier the mean would tell of that one point.
  if (Math.abs(pull) > farPull && Math.abs(excess) > level) return;
  tally.known[k] += level;
  tally.excess[k] += excess;
  tally.variance[k] += variance;
}

function tallyLine(comparison: InjectedSpectra, k: number, x: number, tally: Tally): void {
  const { without, added, rows, known, pattern } = comparison;
  const { nx } = without;
  const at = rows[k] * nx + x;
  const around = [at - 1, at, at + 1];
  if (around.some((i) => without.flags[i] & spoilt)) return;
  const light = (pattern.continuum + pattern.line[x]) * known[k * nx + x];
  const lost = light - (added.flux[at] - without.flux[at]);
  const sigma = Math.sqrt(Math.max(added.variance[at] - without.variance[at], light));
  tally.lines.push({
    flagged: around.some((i) => (added.flags[i] & (Flag.cosmicRay | UNUSABLE)) !== 0),
    clipped: !(lost <= Math.max(clippedShare * light, 5 * sigma)),
  });
}

function cellOf(tally: Tally): Omit<CellScore, "from" | "to" | "place"> {
  const { nPoint, pulls, lines } = tally;
  const share = (n: number, of: number) => (of > 0 ? n / of : Number.NaN);
  const enough = pulls.length >= fewestPoints;
  const { bias, error } = sumBias(tally);
  return {
    nPoint,
    nFibre: tally.known.filter((light) => light > 0).length,
    bias: enough ? bias : Number.NaN,
    biasError: enough ? error : Number.NaN,
    pull: enough ? sigmaPerMad * median(pulls.map(Math.abs)) : Number.NaN,
    beyond5Sigma: share(pulls.filter((pull) => Math.abs(pull) > 5).length, pulls.length),
    falselyFlaggedShare: share(tally.falselyFlagged, nPoint),
    nLine: lines.length,
    lineFlaggedShare: share(lines.filter(({ flagged }) => flagged).length, lines.length),
    lineClippedShare: share(lines.filter(({ clipped }) => clipped).length, lines.length),
  };
}

/** Over all fibres, with the larger of two errors: what the variances say, and what the fibres' own biases do. */
function sumBias({ known, excess, variance }: Tally): { bias: number; error: number } {
  let [light, sum, expected, scatter] = [0, 0, 0, 0];
  known.forEach((own, k) => {
    light += own;
    sum += excess[k];
    expected += variance[k];
  });
  const bias = sum / light;
  known.forEach((own, k) => {
    scatter += (excess[k] - bias * own) ** 2;
  });
  return { bias, error: Math.sqrt(Math.max(expected, scatter)) / light };
}

function fibreBias(tallies: Tally[], k: number): { bias: number; error: number } {
  const sum = (of: (tally: Tally) => Float64Array) => tallies.reduce((total, tally) => total + of(tally)[k], 0);
  const light = sum((tally) => tally.known);
  if (!(light > 0)) return { bias: Number.NaN, error: Number.NaN };
  return { bias: sum((tally) => tally.excess) / light, error: Math.sqrt(sum((tally) => tally.variance)) / light };
}
