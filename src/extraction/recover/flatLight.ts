/** The light that is injected: pixels of a fibre flat, without their flaws, and how much of it each fibre holds.
 *
 * A fibre's known light is the plain sum of the flat's pixels in its zone, above the level of the gaps, averaged along x over
 * a few columns. No profile weighs it. One thing no sum can tell: wings that reach into the gaps' middle look like scattered
 * light. What the profiles in use claim to hold there is added by them: known = sum · f ÷ (sum over the profiles' own light of
 * fluxes f). A Gaussian claims nothing, so what it misses up to the gaps' middle shows as missing; a profile with wings is taken
 * at its word beyond. That is 0.3 % of the light for gaps of 22 px, 1 to 2 % for 9.5 px, at 2 % of the light in wings. */
import { median } from "../../reference/median.js";
import { type Flat, pixelVariance } from "../../tramlines/flat.js";
import type { ProfileLight } from "./light.js";
import { gapLevels, lightAboveGaps, type ZonePlan, zonesAt } from "./zones.js";

/** Columns on each side that a pixel is compared with, and that the sums are averaged over. */
const compareColumns = 3;
const averageColumns = 12;
/** A pixel is a flaw beyond this many σ and this share of its neighbours along x: lines tilt. */
const flawSigma = 6;
const flawShare = 0.1;
/** Columns between two looks at what the profiles claim. */
const claimStep = 32;

export interface FlatLight {
  /** ny × nx, e⁻: the flat's pixels; flaws replaced by the median of their neighbours along x. */
  pixels: Float32Array;
  nFlaw: number;
  /** nActive × nx, e⁻ per column: what each fibre is known to hold. */
  known: Float64Array;
  /** nGap × nx, e⁻ per pixel: level of the gaps. */
  level: Float64Array;
}

export function measureFlatLight(flat: Flat, plan: ZonePlan, profiles: ProfileLight): FlatLight {
  const { pixels, nFlaw } = withoutFlaws(flat);
  const { nx } = flat;
  const nActive = plan.active.length;
  const sums = new Float64Array(nActive * nx);
  const level = new Float64Array(plan.gaps.length * nx);
  for (let x = 0; x < nx; x++) {
    const column = columnOf(pixels, nx, flat.ny, x);
    const zones = zonesAt(plan, x);
    scatter(lightAboveGaps(column, zones), sums, nx, x);
    scatter(gapLevels(column, zones), level, nx, x);
  }
  const known = averageAlongX(sums, nx);
  applyClaims(known, plan, profiles, nx);
  return { pixels, nFlaw, known, level: averageAlongX(level, nx) };
}

/** [ny] of column x. */
export function columnOf(image: Float32Array, nx: number, ny: number, x: number): Float64Array {
  const column = new Float64Array(ny);
  for (let y = 0; y < ny; y++) column[y] = image[y * nx + x];
  return column;
}

function scatter(values: Float64Array, rows: Float64Array, nx: number, x: number): void {
  for (let k = 0; k < values.length; k++) rows[k * nx + x] = values[k];
}

function withoutFlaws(flat: Flat): { pixels: Float32Array; nFlaw: number } {
  const { nx, ny, electrons } = flat;
  const pixels = electrons.slice();
  let nFlaw = 0;
  for (let y = 0; y < ny; y++) {
    for (let x = 0; x < nx; x++) {
      const at = y * nx + x;
      if (isEven(flat, x, y)) continue;
      const near = goodNeighbours(flat, x, y);
      const usual = near.length > 0 ? median(near) : 0;
      const sigma = Math.sqrt(pixelVariance(flat.frame, at, usual) / Math.max(flat.nUsed[at], 1));
      const off = Math.abs(electrons[at] - usual);
      if (isGood(flat, at) && off <= flawSigma * sigma + flawShare * Math.abs(usual)) continue;
      pixels[at] = usual;
      nFlaw++;
    }
  }
  return { pixels, nFlaw };
}

/** Nothing stands out among the pixels around: the usual case, told at once. */
function isEven(flat: Flat, x: number, y: number): boolean {
  const row = y * flat.nx;
  let [lowest, highest] = [Number.POSITIVE_INFINITY, Number.NEGATIVE_INFINITY];
  for (let u = Math.max(x - compareColumns, 0); u <= Math.min(x + compareColumns, flat.nx - 1); u++) {
    if (!isGood(flat, row + u)) return false;
    lowest = Math.min(lowest, flat.electrons[row + u]);
    highest = Math.max(highest, flat.electrons[row + u]);
  }
  const sigma = Math.sqrt(pixelVariance(flat.frame, row + x, lowest) / flat.nUsed[row + x]);
  return highest - lowest <= flawSigma * sigma + flawShare * Math.abs(lowest);
}

function goodNeighbours(flat: Flat, x: number, y: number): number[] {
  const near: number[] = [];
  for (let u = Math.max(x - compareColumns, 0); u <= Math.min(x + compareColumns, flat.nx - 1); u++) {
    const at = y * flat.nx + u;
    if (u !== x && isGood(flat, at)) near.push(flat.electrons[at]);
  }
  return near;
}

function isGood(flat: Flat, at: number): boolean {
  return flat.mask[at] === 0 && flat.nUsed[at] > 0 && Number.isFinite(flat.electrons[at]);
}

/** Rows [n × nx] as a straight line through the columns around each would have them. */
function averageAlongX(rows: Float64Array, nx: number): Float64Array {
  const smooth = new Float64Array(rows.length);
  for (let from = 0; from < rows.length; from += nx) {
    for (let x = 0; x < nx; x++) {
      const [first, last] = [Math.max(x - averageColumns, 0), Math.min(x + averageColumns, nx - 1)];
      const middle = (first + last) / 2;
      let [n, sum, slope, square] = [0, 0, 0, 0];
      for (let u = first; u <= last; u++) {
        n++;
        sum += rows[from + u];
        slope += (u - middle) * rows[from + u];
        square += (u - middle) ** 2;
      }
      smooth[from + x] = sum / n + (square > 0 ? ((x - middle) * slope) / square : 0);
    }
  }
  return smooth;
}

/** From sums above the gaps to whole fluxes, as far as the profiles claim light in the gaps' middle. */
function applyClaims(known: Float64Array, plan: ZonePlan, profiles: ProfileLight, nx: number): void {
  const places: number[] = [];
  for (let x = 0; x < nx - 1; x += claimStep) places.push(x);
  places.push(nx - 1);
  const claims = places.map((x) => {
    const seen = lightAboveGaps(profiles.column(x, known, nx), zonesAt(plan, x));
    return seen.map((sum, k) => (sum > 0 ? known[k * nx + x] / sum : Number.NaN));
  });
  for (let k = 0; k < plan.active.length; k++) {
    for (let x = 0; x < nx; x++) {
      const i = Math.min(Math.floor(x / claimStep), places.length - 2);
      const share = places.length > 1 ? (x - places[i]) / (places[i + 1] - places[i]) : 0;
      const [before, after] = [claims[Math.max(i, 0)][k], claims[Math.min(i + 1, places.length - 1)][k]];
      known[k * nx + x] *= before + share * (after - before);
    }
  }
}
