/** Lines identified in one fibre, found again in all others: from fibre to fibre along the slit the pattern moves a little, by what it
 * moved before and by a shift that most of its lines agree on, so that a bowed slit is followed and no line is taken for its
 * neighbour. A fibre in which another shift does nearly as well is left without lines, for the surface through the others to fill. */
import { legendreArgument, legendreFitClipped, legendreValue } from "../reference/legendre.js";
import type { ArcPeak } from "./lineCentres.js";

/** −1, or the list's row, for every peak of every fibre. */
export type LinesOfPeaks = Int32Array[];

/** How far the pattern may move beyond what is expected, FWHM; and the first step, which nothing foretells. */
const reachFwhm = 1.5;
const firstReachFwhm = 4;
/** Peaks this near to where a line is expected are it, FWHM. */
const nearFwhm = 0.4;
/** The shift that most lines agree on must have this many times the votes of any further than this from it, FWHM. */
const clearRatio = 1.5;
const rivalFwhm = 0.6;
/** Share of the lines, at least, that must be seen again. */
const leastShare = 0.4;
const leastLines = 4;
const kappa = 4;

interface Place {
  line: number;
  x: number;
}

/** @param start fibre in which `matches` were identified. @param slit nFibre, places along the slit on [−1, 1].
 * @param fwhm of lines, columns. */
export function followLines(
  peaks: ArcPeak[][],
  start: number,
  matches: readonly { peak: number; line: number }[],
  slit: Float64Array,
  nx: number,
  fwhm: number,
): LinesOfPeaks {
  const found = peaks.map((list) => new Int32Array(list.length).fill(-1));
  const first = matches.map(({ peak, line }) => ({ line, x: peaks[start][peak].x })).sort((a, b) => a.x - b.x);
  for (const { peak, line } of matches) found[start][peak] = line;
  for (const direction of [-1, 1]) {
    let places = first;
    let from = start;
    // Columns of movement per unit of slit, once two fibres have told.
    let rate = Number.NaN;
    for (let k = start + direction; k >= 0 && k < peaks.length; k += direction) {
      const distance = slit[k] - slit[from];
      const expected = Number.isNaN(rate) ? 0 : rate * distance;
      const reach = (Number.isNaN(rate) ? firstReachFwhm : reachFwhm) * fwhm;
      const next = again(peaks[k], places, expected, reach, fwhm, nx);
      if (next === null) continue;
      next.seen.forEach((line, peak) => {
        found[k][peak] = line;
      });
      rate = next.moved / distance;
      places = next.places;
      from = k;
    }
  }
  return found;
}

/** The pattern in another fibre; null when too little of it is there, or when it may lie in more than one place. */
function again(
  peaks: ArcPeak[],
  places: Place[],
  expected: number,
  reach: number,
  fwhm: number,
  nx: number,
): { seen: Int32Array; places: Place[]; moved: number } | null {
  const needed = Math.max(leastLines, leastShare * places.length);
  const near = nearFwhm * fwhm;
  const shift = commonShift(peaks, places, expected, reach, fwhm);
  if (shift === null) return null;
  let pairs = pairUp(peaks, places, () => shift, near);
  if (pairs.length < needed) return null;
  let moves = (_x: number) => shift;
  for (let round = 0; round < 2; round++) {
    const t = pairs.map(({ place }) => legendreArgument(places[place].x, nx));
    const by = pairs.map(({ peak, place }) => peaks[peak].x - places[place].x);
    const { coef } = legendreFitClipped(t, by, new Float64Array(t.length).fill(1), 2, kappa, 5);
    moves = (x) => legendreValue(coef, legendreArgument(x, nx));
    pairs = pairUp(peaks, places, moves, near);
    if (pairs.length < needed) return null;
  }
  const seen = new Int32Array(peaks.length).fill(-1);
  const moved = places.map(({ line, x }) => ({ line, x: x + moves(x) }));
  for (const { peak, place } of pairs) {
    seen[peak] = places[place].line;
    if (!peaks[peak].saturated) moved[place].x = peaks[peak].x;
  }
  return { seen, places: moved, moved: moves((nx - 1) / 2) };
}

/** The shift within `reach` of the expected one that brings most lines onto peaks; null when another does nearly as well. */
function commonShift(peaks: ArcPeak[], places: Place[], expected: number, reach: number, fwhm: number): number | null {
  const shifts = places.flatMap(({ x }) =>
    peaks.map((peak) => peak.x - x).filter((shift) => Math.abs(shift - expected) <= reach),
  );
  shifts.sort((a, b) => a - b);
  const best = mostVoted(shifts, expected, nearFwhm * fwhm);
  const others = shifts.filter((shift) => Math.abs(shift - best.shift) > rivalFwhm * fwhm);
  return best.votes >= clearRatio * mostVoted(others, expected, nearFwhm * fwhm).votes ? best.shift : null;
}

/** Middle of the most of `sorted` that lie within `width` of each other; of equals the nearest to `expected`. */
function mostVoted(sorted: number[], expected: number, width: number): { shift: number; votes: number } {
  let [best, most] = [expected, 0];
  let low = 0;
  for (let high = 0; high < sorted.length; high++) {
    while (sorted[high] - sorted[low] > width) low++;
    const middle = sorted[(low + high) >> 1];
    const count = high - low + 1;
    if (count > most || (count === most && Math.abs(middle - expected) < Math.abs(best - expected))) {
      [best, most] = [middle, count];
    }
  }
  return { shift: best, votes: most };
}

/** Peaks and lines that are each other's nearest. */
export function pairUp(
  peaks: readonly { x: number }[],
  places: readonly { x: number }[],
  moves: (x: number) => number,
  near: number,
): { peak: number; place: number }[] {
  const at = places.map(({ x }) => x + moves(x));
  const columns = peaks.map(({ x }) => x);
  const nearestPlace = columns.map((x) => nearest(at, x));
  return at.flatMap((x, place) => {
    const peak = nearest(columns, x);
    if (peak < 0 || nearestPlace[peak] !== place || Math.abs(peaks[peak].x - x) > near) return [];
    return [{ peak, place }];
  });
}

function nearest(sorted: number[], x: number): number {
  let best = -1;
  for (let i = 0; i < sorted.length; i++) {
    if (best < 0 || Math.abs(sorted[i] - x) < Math.abs(sorted[best] - x)) best = i;
  }
  return best;
}
