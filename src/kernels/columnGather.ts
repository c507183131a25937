/** From a frame into a sample of its columns: groups of four neighbours, (g · ny + y) · 4 + column. */
import type { NoiseIngredients } from "../reference/variance.js";

/** Columns of a group: lanes of a v128 of f32. */
export const groupColumns = 4;

export interface SampledFrame {
  nx: number;
  ny: number;
  /** ny × nx, e⁻; `mask` not 0 where a pixel is not good. */
  electrons: Float32Array;
  mask: Uint8Array;
  noise: NoiseIngredients;
}

export interface GatheredColumns {
  /** First column of each group. */
  firstColumns: Int32Array;
  /** e⁻, NaN where a pixel is not good. */
  light: Float32Array;
  /** e⁻²: the same, or (g · nBand + bandOfRow[y]) · 4 + column where the frame has no image of it. */
  fixed: Float32Array;
  /** e⁻² per e⁻, or null: 1 everywhere. */
  perElectron: Float32Array | null;
}

/** Row by row, as the frame lies in memory. Columns beyond its last are not good. */
export function gatherColumns(frame: SampledFrame, into: GatheredColumns): void {
  if (frame.noise.fixedVarianceImage === undefined) gatherBands(frame, into);
  for (let y = 0; y < frame.ny; y++) gatherRow(frame, into, y);
}

// A function of its own, which the engine compiles after some hundred rows.
function gatherRow({ nx, ny, electrons, mask, noise }: SampledFrame, into: GatheredColumns, y: number): void {
  const { light, fixed, perElectron, firstColumns } = into;
  const { fixedVarianceImage, inverseResponse } = noise;
  for (let g = 0; g < firstColumns.length; g++) {
    const x0 = firstColumns[g];
    let at = y * nx + x0;
    let to = (g * ny + y) * groupColumns;
    for (let x = x0; x < x0 + groupColumns; x++) {
      const own = x < nx && mask[at] === 0 ? electrons[at] : Number.NaN;
      light[to] = own - own === 0 ? own : Number.NaN;
      if (fixedVarianceImage) fixed[to] = fixedVarianceImage[at];
      if (perElectron !== null && inverseResponse) perElectron[to] = inverseResponse[at];
      at++;
      to++;
    }
  }
}

function gatherBands({ nx, noise: { fixedVariance } }: SampledFrame, { fixed, firstColumns }: GatheredColumns): void {
  const nBand = fixedVariance.length / nx;
  for (let i = 0; i < fixed.length; i++) {
    const band = Math.floor(i / groupColumns) % nBand;
    const x = firstColumns[Math.floor(i / groupColumns / nBand)] + (i % groupColumns);
    fixed[i] = fixedVariance[band * nx + Math.min(x, nx - 1)];
  }
}
