/** Columns of an extraction as its fit left them: the fibres' profiles on the pixels, and every pixel's variance from the
 * model. Pixels that the frame lost are counted as if they were good: what is said of the estimator then holds for the
 * bench, not for this frame's accidents. */
import type { Column } from "../reference/column.js";
import { backgroundSeries, emptyColumn } from "../reference/columns.js";
import type { ExtractionStart, SmoothBackground } from "../reference/extract.js";
import { legendreArgument, legendreBasis } from "../reference/legendre.js";
import { type BlockProfiles, blockProfiles } from "../reference/profile.js";
import { pixelVariance } from "../reference/variance.js";

/** An extraction's fit of its frame; `input` has each profile in one window as wide as it is known. */
export interface FrameFit {
  input: ExtractionStart;
  background: SmoothBackground;
  /** Row of `flux` for each fibre of the input. */
  rows: number[];
  /** nSlit × nx, e⁻ per dispersion pixel: of the joint fit. */
  flux: Float32Array | Float64Array;
}

/** Column x on demand; neighbouring columns share the work of their block. */
export type ColumnSource = (x: number) => Column;

export function modelColumns({ input, background, rows, flux }: FrameFit): ColumnSource {
  const profiles = profileColumns(input, background);
  return (x) => {
    const column = profiles(x);
    column.light.set(
      lightOf(
        column,
        rows.map((row) => flux[row * input.nx + x]),
      ),
    );
    weighByModel(column, column.light);
    return column;
  };
}

/** Columns without light: profiles, background and the ingredients of the noise; nothing is weighted yet. */
export function profileColumns(input: ExtractionStart, background: SmoothBackground): ColumnSource {
  let [loaded, block]: [number, BlockProfiles | null] = [-1, null];
  const inY = Array.from({ length: input.ny }, (_, y) => legendreBasis(legendreArgument(y, input.ny), background.nY));
  return (x) => {
    const first = x - (x % input.blockColumns);
    if (block === null || first !== loaded) [loaded, block] = [first, blockProfiles(input, first)];
    const column = emptyColumn(input, block, x - first);
    loadNoise(input, column, x);
    const series = backgroundSeries(background, legendreArgument(x, input.nx));
    for (let y = 0; y < input.ny; y++) column.background[column.margin + y] = dot(series, inY[y]);
    return column;
  };
}

/** Inverse variances where the frame holds `light` [nRow], e⁻, on top of the background; 0 outside the frame. */
export function weighByModel(column: Column, light: Float64Array): void {
  for (let row = 0; row < column.nRow; row++) {
    const variance = pixelVariance(column.noise, row, light[row] + column.background[row]);
    column.inverseVariance[row] = column.bits[row] === 0 && variance > 0 && variance < Infinity ? 1 / variance : 0;
  }
}

/** Σ f_k P_k on every row, e⁻: [nRow]. `flux`: [nFibre], e⁻. */
export function lightOf(column: Column, flux: ArrayLike<number>): Float64Array {
  const light = new Float64Array(column.nRow);
  for (let k = 0; k < column.nFibre; k++) {
    const first = column.margin + column.start[k];
    for (let i = 0; i < column.nWindow; i++) light[first + i] += flux[k] * column.weights[k * column.nWindow + i];
  }
  return light;
}

/** A smooth background on every pixel: [ny × nx], e⁻ per pixel. */
export function backgroundImage(background: SmoothBackground, nx: number, ny: number): Float32Array {
  const image = new Float32Array(nx * ny);
  const inY = Array.from({ length: ny }, (_, y) => legendreBasis(legendreArgument(y, ny), background.nY));
  for (let x = 0; x < nx; x++) {
    const series = backgroundSeries(background, legendreArgument(x, nx));
    for (let y = 0; y < ny; y++) image[y * nx + x] = dot(series, inY[y]);
  }
  return image;
}

function loadNoise({ noise, nx, ny }: ExtractionStart, column: Column, x: number): void {
  for (let y = 0; y < ny; y++) {
    const [at, row] = [y * nx + x, column.margin + y];
    column.bits[row] = 0;
    column.noise.fixed[row] = noise.fixedVarianceImage?.[at] ?? noise.fixedVariance[noise.bandOfRow[y] * nx + x];
    column.noise.inverseResponse[row] = noise.inverseResponse?.[at] ?? 1;
    column.noise.responseRelativeVariance[row] = noise.responseRelativeVariance?.[at] ?? 0;
  }
}

function dot(a: Float64Array, b: Float64Array): number {
  let sum = 0;
  for (let i = 0; i < a.length; i++) sum += a[i] * b[i];
  return sum;
}
