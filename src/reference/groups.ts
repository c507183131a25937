/** Means over groups of neighbouring columns, row by row, cosmic rays left out. */
import { median } from "./median.js";
import type { NoiseIngredients } from "./variance.js";

/** A frame, or the mean of several alike, whose columns are to be grouped. */
export interface GroupedPixels {
  nx: number;
  ny: number;
  /** ny × nx, e⁻. */
  electrons: Float32Array;
  /** ny × nx: frames in a pixel's mean; 0 for a pixel without value. */
  nUsed: Uint8Array;
  /** Frames in all. */
  nFrame: number;
  /** One frame's. */
  noise: NoiseIngredients;
}

/** Columns `from` … `to − 1`. */
export interface ColumnRange {
  from: number;
  to: number;
}

/** The mean of a group, all [ny]. */
export interface GroupMean {
  /** e⁻ per pixel; NaN where no pixel is good. */
  mean: Float64Array;
  /** Pixels in the mean. */
  count: Uint16Array;
  /** e⁻²: variance of the mean without light. */
  fixedVariance: Float64Array;
  /** e⁻² per e⁻ of light. */
  variancePerElectron: Float64Array;
}

/** A pixel counts as hit by a cosmic ray when it stands above its row's median in the group by this many σ, and by half
 * of what the neighbouring rows differ (a tilted tramline changes the light along a row by less). */
export const KAPPA_HIT = 8;

export function groupColumns(pixels: GroupedPixels, { from, to }: ColumnRange): GroupMean {
  const { nx, ny, electrons, nUsed } = pixels;
  const group: GroupMean = {
    mean: new Float64Array(ny),
    count: new Uint16Array(ny),
    fixedVariance: new Float64Array(ny),
    variancePerElectron: new Float64Array(ny),
  };
  const medians = Array.from({ length: ny }, (_, y) =>
    median(electrons.subarray(y * nx + from, y * nx + to).filter((_, i) => nUsed[y * nx + from + i] > 0)),
  );
  const near = (y: number) => medians[Math.max(0, Math.min(ny - 1, y))] || 0;
  for (let y = 0; y < ny; y++) {
    const three = [near(y - 1), near(y), near(y + 1)];
    averageRow(pixels, from, to, y, medians[y], 0.5 * (Math.max(...three) - Math.min(...three)), group);
  }
  return group;
}

function averageRow(
  { nx, electrons, nUsed, noise }: GroupedPixels,
  from: number,
  to: number,
  y: number,
  rowMedian: number,
  slope: number,
  group: GroupMean,
): void {
  let sum = 0;
  let fixed = 0;
  let perElectron = 0;
  let n = 0;
  for (let x = from; x < to; x++) {
    const at = y * nx + x;
    const nFrame = nUsed[at];
    if (nFrame === 0) continue;
    const own = noise.fixedVarianceImage?.[at] ?? noise.fixedVariance[noise.bandOfRow[y] * nx + x];
    const inverseResponse = noise.inverseResponse?.[at] ?? 1;
    const light = Math.max(rowMedian, 0);
    const variance = own + light * inverseResponse + (noise.responseRelativeVariance?.[at] ?? 0) * light * light;
    const excess = electrons[at] - rowMedian - slope;
    if (excess > 0 && excess * excess * nFrame > KAPPA_HIT * KAPPA_HIT * variance) continue;
    sum += electrons[at];
    fixed += own / nFrame;
    perElectron += inverseResponse / nFrame;
    n++;
  }
  group.count[y] = n;
  group.mean[y] = sum / n;
  group.fixedVariance[y] = fixed / (n * n);
  group.variancePerElectron[y] = perElectron / (n * n);
}
