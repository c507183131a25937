/** A cut through the flat across the dispersion. Strips of columns about the middle are slid along the tramlines' course,
 * slope and curvature, before they are merged, so that steep or strongly curved fibres are not blurred. */
import { medianOf } from "../detector/clip.js";
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
/** A strip's tramlines are sought this far up and down from the next strip's, px. */
const MAX_STRIP_SHIFT = 3;

/** @throws TraceError when the flat has no good pixel about its middle. */
export function cutThrough(flat: Flat): Cut {
  const nStrip = Math.max(1, Math.min(MAX_STRIPS, Math.floor(flat.nx / STRIP_COLUMNS)));
  const columns = Math.min(STRIP_COLUMNS, flat.nx);
  for (const share of [0.5, 0.4, 0.6, 0.3, 0.7, 0.2, 0.8]) {
    const start = Math.round(share * flat.nx) - (nStrip * columns) / 2;
    const first = Math.max(0, Math.min(flat.nx - nStrip * columns, Math.floor(start)));
    const strips = Array.from({ length: nStrip }, (_, s) =>
      groupColumns(flat, first + s * columns, first + (s + 1) * columns),
    ).filter((strip) => strip.count.filter((n) => n > 0).length > 0.5 * flat.ny);
    if (strips.length >= Math.max(1, nStrip / 2)) return mergeStrips(strips, flat.ny);
  }
  throw new TraceError(
    `${flat.name}: hardly a pixel about the middle columns is good; give a flat that was read out whole.`,
  );
}

/** Median over strips, each slid along the tramlines' course to the middle one. */
function mergeStrips(strips: ColumnGroup[], ny: number): Cut {
  const middle = strips.length >> 1;
  const { slope, offset } = course(strips, ny, middle);
  const cut: Cut = {
    x: strips[middle].x,
    slope,
    mean: new Float64Array(ny).fill(Number.NaN),
    fixedVariance: new Float64Array(ny),
    variancePerElectron: new Float64Array(ny),
  };
  for (let y = 0; y < ny; y++) {
    const values: number[] = [];
    let fixed = 0;
    let perElectron = 0;
    strips.forEach((strip, s) => {
      const value = between(strip.mean, y + offset[s]);
      if (Number.isNaN(value) || strip.count[y] === 0) return;
      values.push(value);
      fixed += strip.fixedVariance[y];
      perElectron += strip.variancePerElectron[y];
    });
    if (values.length === 0) continue;
    cut.mean[y] = medianOf(values);
    // The median of n values has π/2 times the variance of their mean.
    cut.fixedVariance[y] = (0.5 * Math.PI * fixed) / values.length ** 2;
    cut.variancePerElectron[y] = (0.5 * Math.PI * perElectron) / values.length ** 2;
  }
  return cut;
}

/** How far each strip's light stands above the middle strip's, px, as a parabola: curvature within the cut would blur it. */
function course(strips: ColumnGroup[], ny: number, middle: number): { slope: number; offset: number[] } {
  const steps = strips.slice(1).map((strip, s) => shiftBetween(strips[s], strip, ny));
  if (steps.length === 0) return { slope: 0, offset: [0] };
  // Two halves, robustly: their medians give the step in the middle and how it grows along the cut.
  const half = steps.length >> 1;
  const [early, late] =
    half > 1 ? [medianOf(steps.slice(0, half)), medianOf(steps.slice(-half))] : [steps[0], steps[0]];
  const growth = half > 1 ? (late - early) / (steps.length - half) : 0;
  const step = half > 1 ? 0.5 * (early + late) : medianOf(steps);
  const centre = 0.5 * (steps.length - 1);
  const at = (s: number) => step * s + growth * (0.5 * s * (s - 1) - centre * s);
  const dx = (strips[strips.length - 1].x - strips[0].x) / steps.length;
  return {
    slope: (step + growth * (middle - 0.5 - centre)) / dx,
    offset: strips.map((_, s) => at(s) - at(middle)),
  };
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
