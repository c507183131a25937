/** Light sums that need no profile: the slit cut into zones, one a fibre, halfway to its neighbours, and the level in the
 * gaps, above which every zone is summed.
 *
 *      gap |  zone 1 | zone 2 | zone 3 |      gap       |  zone 4 | …
 *       ×  |    y₁   |   y₂   |   y₃   ·       ×        ·    y₄   |        × level taken here, straight lines between
 *
 * A zone beside a gap reaches to its middle. What two zones lose to each other across their border cancels in their sum. */
import { legendreArgument, legendreValue } from "../../reference/legendre.js";
import { median } from "../../reference/median.js";
import type { Tramlines } from "../../tramlines/tramlines.js";

/** From this distance on, in pitches, two neighbouring fibres have a gap between them. */
const gapPitches = 1.6;
/** Beyond the slit's ends the level is taken this far out, in pitches, or nearer at the frame's edge, but not below. */
const endPitches = 2;
const nearestEndPitches = 1.3;

export interface ZonePlan {
  tramlines: Tramlines;
  /** Fibres that take part, as indices into the tramlines, low y first. */
  active: number[];
  /** px, median in the middle column. */
  pitch: number;
  /** Gaps as the index of the active fibre below each; −1 and n − 1 are the slit's ends. */
  gaps: number[];
  /** px from the last fibre to where the level is taken: lower end, upper end. */
  ends: [number, number];
}

/** One column's zones. */
export interface Zones {
  /** [nActive]: lower and upper border, px; pixel i covers i − ½ … i + ½. */
  lower: Float64Array;
  upper: Float64Array;
  /** [nGap]: y of the level, px. */
  gapAt: Float64Array;
}

/** @throws RangeError when there is no gap to take the level in. */
export function planZones(tramlines: Tramlines, active: number[]): ZonePlan {
  const xs = [0, 0.25, 0.5, 0.75, 1].map((share) => share * (tramlines.nx - 1));
  const runs = xs.map((x) => centres(tramlines, active, x));
  const middle = runs[2];
  const steps = Array.from(middle.subarray(1), (y, i) => y - middle[i]);
  const pitch = steps.length > 0 ? median(steps) : 10;
  const room = [
    Math.min(...runs.map((y) => y[0])) - 1,
    tramlines.ny - 2 - Math.max(...runs.map((y) => y[y.length - 1])),
  ];
  const gaps = steps.flatMap((step, i) => (step > gapPitches * pitch ? [i] : []));
  if (room[0] > nearestEndPitches * pitch) gaps.unshift(-1);
  if (room[1] > nearestEndPitches * pitch) gaps.push(active.length - 1);
  if (gaps.length === 0) {
    throw new RangeError(
      `No two of ${active.length} fibres stand over ${gapPitches} pitches apart and both slit ends lie at the frame's edge; the recovery test needs one gap to tell fibres' light from scattered light.`,
    );
  }
  const [low, high] = room.map((pixels) => Math.min(endPitches * pitch, pixels));
  return { tramlines, active, pitch, gaps, ends: [low, high] };
}

/** y of the active fibres in column x. */
export function centres(tramlines: Tramlines, active: number[], x: number): Float64Array {
  const t = legendreArgument(x, tramlines.nx);
  const nCoef = tramlines.degree + 1;
  return Float64Array.from(active, (k) => legendreValue(tramlines.legendre, t, k * nCoef, nCoef));
}

/** Where the active fibres stand along the slit, in pitches: [nActive]. */
export function slitPlaces({ tramlines, active, pitch }: ZonePlan): Float64Array {
  return centres(tramlines, active, (tramlines.nx - 1) / 2).map((y) => y / pitch);
}

export function zonesAt(plan: ZonePlan, x: number): Zones {
  const y = centres(plan.tramlines, plan.active, x);
  const n = y.length;
  const [belowFirst, aboveLast] = [y[0] - plan.ends[0], y[n - 1] + plan.ends[1]];
  const borders = Float64Array.from({ length: n + 1 }, (_, i) => {
    if (i === 0) return plan.gaps[0] === -1 ? belowFirst : y[0] - plan.pitch / 2;
    if (i === n) return plan.gaps.includes(n - 1) ? aboveLast : y[n - 1] + plan.pitch / 2;
    return (y[i - 1] + y[i]) / 2;
  });
  return {
    lower: borders.slice(0, n),
    upper: borders.slice(1),
    gapAt: Float64Array.from(plan.gaps, (i) => borders[i + 1]),
  };
}

/** Mean of the column over one pixel's height around each gap's place: [nGap]. `column`: [ny]. */
export function gapLevels(column: Float64Array, { gapAt }: Zones): Float64Array {
  return gapAt.map((y) => sumBetween(column, y - 0.5, y + 0.5));
}

/** Level at `y`, straight lines between the gaps, constant beyond the outermost. */
export function levelAt(y: number, { gapAt }: Zones, levels: ArrayLike<number>, from = 0): number {
  const last = gapAt.length - 1;
  if (y <= gapAt[0]) return levels[from];
  if (y >= gapAt[last]) return levels[from + last];
  let i = 1;
  while (gapAt[i] < y) i++;
  const share = (y - gapAt[i - 1]) / (gapAt[i] - gapAt[i - 1]);
  return levels[from + i - 1] + share * (levels[from + i] - levels[from + i - 1]);
}

/** Light in each zone above the level of the gaps, in the column's own unit: [nActive]. */
export function lightAboveGaps(column: Float64Array, zones: Zones): Float64Array {
  const levels = gapLevels(column, zones);
  return zones.lower.map((lower, k) => {
    const upper = zones.upper[k];
    return sumBetween(column, lower, upper) - (upper - lower) * levelAt((lower + upper) / 2, zones, levels);
  });
}

/** Σ of the column from y = `lower` to `upper`, pixels at the borders by the share of them inside. */
function sumBetween(column: Float64Array, lower: number, upper: number): number {
  const first = Math.max(Math.floor(lower + 0.5), 0);
  const last = Math.min(Math.floor(upper + 0.5), column.length - 1);
  let sum = 0;
  for (let i = first; i <= last; i++) {
    const inside = Math.min(upper, i + 0.5) - Math.max(lower, i - 0.5);
    if (inside > 0) sum += inside * column[i];
  }
  return sum;
}
