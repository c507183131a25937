/** A cut through the flat across the dispersion: a robust mean over columns about the middle, each moved along the
 * tramlines' course by whole rows, so that steep or strongly curved fibres are not blurred. */
import { medianOf } from "../detector/clip.js";
import type { Kernels } from "../kernels/module.js";
import { TraceError } from "./errors.js";
import { type ColumnGroup, type Flat, groupColumns } from "./flat.js";

/** A robust mean over columns about the middle, tilted so that it follows the tramlines. Arrays [ny]. */
export interface Cut {
  /** Column that it stands for. */
  x: number;
  /** How the tramlines run there, px of y per px of x. */
  slope: number;
  mean: Float64Array;
  fixedVariance: Float64Array;
  variancePerElectron: Float64Array;
}

const STRIP_COLUMNS = 8;
const MAX_STRIPS = 16;
const MIN_STRIPS = 4;
/** At most this share of the columns: over more of them the fibres no longer move alike. */
const CUT_SHARE = 0.125;
/** A strip's tramlines are sought this far up and down from the next strip's, px. */
const MAX_STRIP_SHIFT = 3;

/** Light is merged only from columns whose tramlines stand this near to a whole number of rows above or below the middle
 * one's, px: moved by whole rows it is neither blurred nor interpolated. */
const MAX_OFF_ROW = 0.15;
/** Two groups that differ by more than this many σ: the lower one counts. */
const KAPPA_PAIR = 6;

/** @throws TraceError when the flat has no good pixel about its middle. */
export function cutThrough(kernels: Kernels, flat: Flat): Cut {
  const most = Math.floor(flat.nx / STRIP_COLUMNS);
  const nStrip = Math.max(1, Math.min(MAX_STRIPS, most, Math.max(MIN_STRIPS, Math.ceil(CUT_SHARE * most))));
  const columns = Math.min(STRIP_COLUMNS, flat.nx);
  for (const share of [0.5, 0.4, 0.6, 0.3, 0.7, 0.2, 0.8]) {
    const start = Math.round(share * flat.nx) - (nStrip * columns) / 2;
    const first = Math.max(0, Math.min(flat.nx - nStrip * columns, Math.floor(start)));
    const ranges = Array.from({ length: nStrip }, (_, s) => ({
      from: first + s * columns,
      to: first + (s + 1) * columns,
    }));
    const strips = groupColumns(kernels, flat, ranges).filter((strip) => isWhole(strip, flat.ny));
    if (strips.length < Math.max(1, nStrip / 2)) continue;
    const path = course(strips, flat.ny);
    const groups = groupsOnRows(kernels, flat, path, first, first + nStrip * columns).filter(({ group }) =>
      isWhole(group, flat.ny),
    );
    if (groups.length > 0) return merge(groups, path, flat.ny);
  }
  throw new TraceError(
    `${flat.name}: hardly a pixel about the middle columns is good; give a flat that was read out whole.`,
  );
}

/** A cut needs a value in this share of its rows. */
const GOOD_SHARE = 0.2;

function isWhole(group: ColumnGroup, ny: number): boolean {
  return group.count.reduce((n, count) => n + (count > 0 ? 1 : 0), 0) > GOOD_SHARE * ny;
}

/** How the tramlines run about the middle: y(x) − y(x0) = slope · (x − x0) + curvature/2 · (x − x0)². */
interface Course {
  x0: number;
  slope: number;
  curvature: number;
}

/** From the shifts between neighbouring strips; the medians of their two halves tell the step and how it grows. */
function course(strips: ColumnGroup[], ny: number): Course {
  const x0 = strips[strips.length >> 1].x;
  const steps = strips.slice(1).map((strip, s) => ({
    x: 0.5 * (strip.x + strips[s].x),
    slope: shiftBetween(strips[s], strip, ny) / (strip.x - strips[s].x),
  }));
  if (steps.length < 4)
    return { x0, slope: steps.length > 0 ? medianOf(steps.map((step) => step.slope)) : 0, curvature: 0 };
  const half = steps.length >> 1;
  const [early, late] = [steps.slice(0, half), steps.slice(-half)].map((part) => ({
    x: medianOf(part.map((step) => step.x)),
    slope: medianOf(part.map((step) => step.slope)),
  }));
  const curvature = (late.slope - early.slope) / (late.x - early.x);
  return { x0, slope: early.slope + curvature * (x0 - early.x), curvature };
}

interface ShiftedGroup {
  group: ColumnGroup;
  /** Rows that its light stands above the middle's. */
  rows: number;
}

/** Runs of columns that stand a whole number of rows off the middle, in groups of at most STRIP_COLUMNS. */
function groupsOnRows(
  kernels: Kernels,
  flat: Flat,
  { x0, slope, curvature }: Course,
  from: number,
  to: number,
): ShiftedGroup[] {
  const runs: { from: number; to: number; rows: number }[] = [];
  const offset = (x: number) => slope * (x - x0) + 0.5 * curvature * (x - x0) ** 2;
  const rowsOf = (x: number) => {
    const rows = Math.round(offset(x));
    return Math.abs(offset(x) - rows) <= MAX_OFF_ROW ? rows : Number.NaN;
  };
  for (let x = from; x < to; ) {
    const rows = rowsOf(x);
    let end = x + 1;
    while (end < to && end - x < STRIP_COLUMNS && rowsOf(end) === rows) end++;
    if (!Number.isNaN(rows)) runs.push({ from: x, to: end, rows });
    x = end;
  }
  return groupColumns(kernels, flat, runs).map((group, i) => ({ group, rows: runs[i].rows }));
}

/** Median over groups, each moved by its whole rows. */
function merge(groups: ShiftedGroup[], path: Course, ny: number): Cut {
  const cut: Cut = {
    x: path.x0,
    slope: path.slope,
    mean: new Float64Array(ny).fill(Number.NaN),
    fixedVariance: new Float64Array(ny),
    variancePerElectron: new Float64Array(ny),
  };
  for (let y = 0; y < ny; y++) {
    const values: number[] = [];
    let fixed = 0;
    let perElectron = 0;
    for (const { group, rows } of groups) {
      const at = y + rows;
      if (at < 0 || at >= ny || group.count[at] === 0) continue;
      values.push(group.mean[at]);
      fixed += group.fixedVariance[at];
      perElectron += group.variancePerElectron[at];
    }
    if (values.length === 0) continue;
    const lowest = Math.min(...values);
    const pairVariance = fixed + perElectron * Math.max(0, lowest) + (0.05 * lowest) ** 2;
    const disagree = values.length === 2 && (values[0] - values[1]) ** 2 > KAPPA_PAIR ** 2 * pairVariance;
    cut.mean[y] = disagree ? lowest : medianOf(values);
    // The median of n values has π/2 times the variance of their mean.
    cut.fixedVariance[y] = (0.5 * Math.PI * fixed) / values.length ** 2;
    cut.variancePerElectron[y] = (0.5 * Math.PI * perElectron) / values.length ** 2;
  }
  return cut;
}

/** How far the light of `right` stands above that of `left`, px, by least squares on a grid of quarter pixels and the
 * parabola through its lowest three values. */
function shiftBetween(left: ColumnGroup, right: ColumnGroup, ny: number): number {
  const grid = Array.from({ length: 8 * MAX_STRIP_SHIFT + 1 }, (_, i) => 0.25 * i - MAX_STRIP_SHIFT);
  const cost = grid.map((shift) => mismatch(left, right, ny, shift));
  const best = cost.reduce((b, c, i) => (c < cost[b] ? i : b), 0);
  if (best === 0 || best === grid.length - 1) return grid[best];
  const curvature = cost[best - 1] - 2 * cost[best] + cost[best + 1];
  return grid[best] + (curvature > 0 ? (0.125 * (cost[best - 1] - cost[best + 1])) / curvature : 0);
}

/** Mean squared difference when both are moved half of the shift each: off the grid by as much, so blurred alike. */
function mismatch(left: ColumnGroup, right: ColumnGroup, ny: number, shift: number): number {
  let sum = 0;
  let n = 0;
  for (let y = MAX_STRIP_SHIFT; y < ny - MAX_STRIP_SHIFT; y++) {
    const difference = between(right.mean, y + 0.5 * shift) - between(left.mean, y - 0.5 * shift);
    if (Number.isNaN(difference)) continue;
    sum += difference * difference;
    n++;
  }
  return n > 0 ? sum / n : Number.POSITIVE_INFINITY;
}

/** Linear between pixels; NaN outside or beside a pixel without value. */
function between(values: Float64Array, y: number): number {
  const low = Math.floor(y);
  const share = y - low;
  if (share === 0) return low >= 0 && low < values.length ? values[low] : Number.NaN;
  if (low < 0 || low + 1 >= values.length) return Number.NaN;
  return values[low] + share * (values[low + 1] - values[low]);
}
