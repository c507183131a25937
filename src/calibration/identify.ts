/** Which line of a list is which peak of an arc: of all readings within the limits (arcProblem.ts) the one that explains the peaks best, refused when
 * chance could have made it or when another reading explains them about as well. A wavelength scale read wrongly looks as
 * good as the right one until somebody measures a velocity: right or refused, never a guess. */
import { type ArcProblem, arcProblem, type IdentifiablePeak } from "./arcProblem.js";
import {
  finestTolerance,
  nearbySeeds,
  type Reading,
  readingAt,
  refineReading,
  unexplainedRow,
  unsupportedEnds,
} from "./arcReading.js";
import { searchArc } from "./arcSearch.js";
import { blendPulls } from "./blends.js";
import { CalibrationError } from "./errors.js";
import type { LineList } from "./lamps.js";

export type { IdentifiablePeak } from "./arcProblem.js";

export interface Identification {
  /** Indices into the peaks and into the list, in order of peaks; only what all likely readings agree on, and no line that the instrument
   * cannot tell from its neighbour. */
  matches: { peak: number; line: number }[];
  /** Wavelength runs against the approximate range. */
  reversed: boolean;
  /** λ(x) in the list's medium: Legendre series over the columns, Å, 4 terms; good to a px or so, beyond the matches a guess. */
  legendre: Float64Array;
  /** px, of the matches about that series. */
  rms: number;
  /** nats by which the reading beats chance, all readings that were tried taken into account. */
  score: number;
  /** The same of the best reading that is another one; −∞ when there is none. */
  runnerUp: number;
  /** Peaks within the tolerance of a line, before doubtful ones were left out. */
  nExplained: number;
  warnings: string[];
}

const FEWEST = 5;
/** e⁻⁷ ≈ 1/1000 that chance does it. */
const CLEAR_OF_CHANCE = 7;
/** A factor e¹⁰ ≈ 22 000 in likelihood between two readings. */
const CLEAR_MARGIN = 10;
/** Another reading: this share of the matched peaks gets other lines. */
const OTHER_SHARE = 0.25;
/** px: lines nearer than this share of their width are not told apart. */
const UNRESOLVED = 1.3;
/** px: lines that a blend may pull further are left out. */
const MOST_PULL = 0.3;
const USUAL_FWHM = 2.5;
const LOCAL_STEPS = [0.004, 0.012];

/** @param peaks of one fibre's arc (or a mean of like ones), in any order; false ones may be among them.
 * @param approximateRange Å at the first and the last column, in the list's medium: may be off by 30 % in length, by 30 % of its length
 * in place, and the wrong way round.
 * @throws CalibrationError when there is no reading, or more than one. */
export function identify(
  peaks: readonly IdentifiablePeak[],
  lines: LineList,
  approximateRange: readonly [number, number],
  nx: number,
): Identification {
  requireEnough(peaks, lines, approximateRange);
  const problem = arcProblem(peaks, lines, approximateRange, nx);
  if (problem.index.length < FEWEST) {
    throw new CalibrationError(
      `The list has ${problem.index.length} lines within 30 % of ${spelled(approximateRange)} Å, but at least ${FEWEST} are needed; check the lamps, and 'range' under [wavelength].`,
    );
  }
  const readings = allReadings(problem);
  const [best] = readings;
  requireClear(problem, readings, lines);
  return identification(problem, best, readings, peaks, lines);
}

function requireEnough(peaks: readonly IdentifiablePeak[], lines: LineList, [first, last]: readonly [number, number]) {
  if (!(first > 0 && last > 0) || first === last) {
    throw new CalibrationError(
      `The approximate range is ${first} to ${last} Å, but two different wavelengths over 0 were expected; correct 'range' under [wavelength].`,
    );
  }
  const odd = peaks.find((peak) => !Number.isFinite(peak.x));
  if (odd) throw new RangeError(`A peak lies at column ${odd.x}, but a number was expected.`);
  if (peaks.length >= FEWEST) return;
  throw new CalibrationError(
    `The arc has ${peaks.length} peaks, but at least ${FEWEST} are needed to identify its lines (the list has ${lines.wavelength.length}); is the lamp on, and exposed long enough?`,
  );
}

/** Distinct readings, best first. */
function allReadings(problem: ArcProblem): Reading[] {
  const { seeds, tolerance } = searchArc(problem);
  const coarse = distinct(
    problem,
    seeds.map((seed) => refineReading(problem, seed, tolerance)),
  );
  const local = coarse
    .slice(0, 3)
    .flatMap((reading) => LOCAL_STEPS.flatMap((step) => nearbySeeds(reading, step)))
    .map((seed) => refineReading(problem, seed, 1.5 * problem.pixel));
  return distinct(problem, [...coarse, ...local]);
}

function distinct(problem: ArcProblem, readings: Reading[]): Reading[] {
  const sorted = readings.filter((one) => one.nMatch >= 3 && one.score > -1e9).sort((a, b) => b.score - a.score);
  const kept: Reading[] = [];
  for (const one of sorted) {
    if (kept.length >= 40) break;
    if (kept.every((other) => differing(problem, other, one).length > 0)) kept.push(one);
  }
  return kept;
}

/** Peaks matched in `a` that `b` puts elsewhere. */
function differing(problem: ArcProblem, a: Reading, b: Reading): number[] {
  const apart = apartIn(problem, a);
  const out: number[] = [];
  a.line.forEach((line, i) => {
    if (line >= 0 && Math.abs(readingAt(b, problem.t[i]) - problem.u[line]) > apart) out.push(i);
  });
  return out;
}

/** u between two places that a reading could not have meant both. */
function apartIn(problem: ArcProblem, { tolerance, stretch }: Reading): number {
  return 2 * Math.max(tolerance, 2 * finestTolerance(problem)) * problem.pixel * Math.abs(stretch);
}

function isOther(problem: ArcProblem, best: Reading, one: Reading): boolean {
  return differing(problem, best, one).length > OTHER_SHARE * best.nMatch;
}

function requireClear(problem: ArcProblem, readings: Reading[], lines: LineList): void {
  const [best] = readings;
  const n = problem.t.length;
  if (best === undefined || best.nMatch < FEWEST || best.score < CLEAR_OF_CHANCE) {
    const found = best
      ? `the best reading, ${asRange(problem, best)} Å, explains ${best.nMatch} of them, which chance does too`
      : "no reading fits";
    throw new CalibrationError(
      `The arc's ${n} peaks could not be identified with the ${problem.index.length} lines of the list (${namesOf(lines)}): ${found}; check which lamps were on, and 'range' under [wavelength].`,
    );
  }
  const row = unexplainedRow(problem, best);
  if (row !== null) {
    const column = (i: number) => Math.round((problem.t[i] + 1) / problem.pixel) + 1;
    throw new CalibrationError(
      `The arc's ${n} peaks read as ${asRange(problem, best)} Å explain none of the peaks between columns ${column(row.from)} and ${column(row.to)}, so that the reading may hold for a part of the arc only; name every lamp that was on, and give a better 'range' under [wavelength].`,
    );
  }
  const other = readings.find((one) => isOther(problem, best, one));
  if (other === undefined || best.score - other.score >= CLEAR_MARGIN) return;
  throw new CalibrationError(
    `The arc's ${n} peaks can be read in two ways, ${asRange(problem, best)} Å (${best.nMatch} explained) and ${asRange(problem, other)} Å (${other.nMatch} explained); name the lamps that were on and no others, give a better 'range' under [wavelength], or use an arc with more lines.`,
  );
}

function namesOf({ lamp }: LineList): string {
  const names = [...new Set(lamp)].filter((name) => name !== "");
  return names.length > 0 ? names.join(", ") : "lamps not named";
}

function asRange({ middle, half }: ArcProblem, reading: Reading): string {
  return spelled([middle + half * readingAt(reading, -1), middle + half * readingAt(reading, 1)]);
}

function spelled([first, last]: readonly [number, number]): string {
  return `${Math.round(first)} to ${Math.round(last)}`;
}

function identification(
  problem: ArcProblem,
  best: Reading,
  readings: Reading[],
  peaks: readonly IdentifiablePeak[],
  lines: LineList,
): Identification {
  const doubtful = new Set(unsupportedEnds(problem, best, apartIn(problem, best), CLEAR_MARGIN));
  for (const one of readings.slice(1)) {
    if (best.score - one.score >= CLEAR_MARGIN) break;
    for (const i of differing(problem, best, one)) doubtful.add(i);
  }
  const fwhm = widthOf(peaks);
  const perPixel = Math.abs(problem.half * best.stretch) * problem.pixel;
  const pulls = blendPulls(
    lines,
    Array.from(best.line.entries()).flatMap(([i, j]) =>
      j < 0 ? [] : [{ line: problem.index[j], electrons: peaks[i].electrons }],
    ),
    [problem.middle + problem.half * readingAt(best, -1), problem.middle + problem.half * readingAt(best, 1)],
    peaks.reduce((least, peak) => Math.min(least, peak.electrons), Number.POSITIVE_INFINITY),
    UNRESOLVED * fwhm * perPixel,
  );
  const matches: Identification["matches"] = [];
  const squares: number[] = [];
  best.line.forEach((j, peak) => {
    if (j < 0 || doubtful.has(peak) || pulls[problem.index[j]] > MOST_PULL * perPixel) return;
    matches.push({ peak, line: problem.index[j] });
    squares.push(((readingAt(best, problem.t[peak]) - problem.u[j]) / (problem.pixel * best.stretch)) ** 2);
  });
  if (matches.length < FEWEST) {
    throw new CalibrationError(
      `The arc's ${problem.t.length} peaks read as ${asRange(problem, best)} Å, but only ${matches.length} of them are lines that stand alone, and at least ${FEWEST} are needed; use an arc with more lines, or lamps whose lines do not blend.`,
    );
  }
  const { middle, half } = problem;
  const slope = half * best.stretch;
  const other = readings.find((one) => isOther(problem, best, one));
  return {
    matches,
    reversed: best.stretch < 0,
    legendre: Float64Array.of(middle + half * best.shift, slope, slope * best.curve, slope * best.cubic),
    rms: Math.sqrt(squares.reduce((sum, value) => sum + value, 0) / squares.length),
    score: best.score,
    runnerUp: other?.score ?? Number.NEGATIVE_INFINITY,
    nExplained: best.nMatch,
    warnings: [],
  };
}

function widthOf(peaks: readonly IdentifiablePeak[]): number {
  const widths = peaks.flatMap(({ fwhm }) => (fwhm !== undefined && fwhm > 0 ? [fwhm] : [])).sort((a, b) => a - b);
  return widths.length > 0 ? widths[widths.length >> 1] : USUAL_FWHM;
}
