/** A smooth background under the fibres, through the pixels that no fibre reaches: slit ends, gaps between blocks,
 * dead fibres. A low-order Legendre surface, clipped. */
import type { Frame } from "../detector/frame.js";
import { factorBand, solveBand } from "../reference/banded.js";
import type { SmoothBackground } from "../reference/extract.js";
import { legendreArgument, legendreBasis, legendreValue } from "../reference/legendre.js";
import { median } from "../reference/median.js";
import type { Tramlines } from "../tramlines/tramlines.js";

/** A pixel at this distance, in σ, holds 4e-5 to 7e-5 of a fibre's light: wider would leave no gap between most blocks. */
const gapSigma = 4.3;
/** Columns that one median is taken over. */
export const cellColumns = 16;
const largestX = 3;
const largestY = 5;
const clipSigma = 3;
const clipRounds = 5;

export interface BackgroundFit extends SmoothBackground {
  /** Medians that the surface goes through. */
  nCell: number;
  /** Their scatter about it, e⁻ per pixel. */
  rms: number;
  warnings: string[];
}

interface Cell {
  x: number;
  y: number;
  /** e⁻ */
  level: number;
  /** e⁻² */
  variance: number;
}

/** No background at all: a flat 0. */
export function noBackground(): SmoothBackground {
  return { nX: 1, nY: 1, coefficients: Float64Array.of(0) };
}

/** Fits the background of `frame` between the tramlines. Without gaps to see it in it is 0, and a warning says so.
 * `light`: [ny × nx] e⁻, the frame without its fibres' light as far as that is known; NaN where not to be used. */
export function fitBackground(frame: Frame, tramlines: Tramlines, light = frame.electrons): BackgroundFit {
  const cells = gapCells(frame, tramlines, light);
  const nY = supportedOrders(cells, frame.ny);
  const nX = Math.min(largestX, 1 + Math.floor(frame.nx / (4 * cellColumns)));
  if (nY < 1 || cells.length < 4 * nX * nY) {
    const warning = `${frame.name}: no gap between fibres is wide enough to see scattered light in, so none is taken off; faint fibres may hold some.`;
    return { ...noBackground(), nCell: cells.length, rms: Number.NaN, warnings: [warning] };
  }
  return fitSurface(cells, nX, nY, frame);
}

/** Medians over `cellColumns` columns of rows that stay clear of every lit fibre. */
function gapCells(frame: Frame, tramlines: Tramlines, light: Float32Array): Cell[] {
  const cells: Cell[] = [];
  for (let x0 = 0; x0 + cellColumns <= frame.nx; x0 += cellColumns) {
    const free = freeRows(tramlines, frame, x0);
    for (let y = 0; y < frame.ny; y++) {
      const levels: number[] = [];
      for (let x = x0; free[y] && x < x0 + cellColumns; x++) {
        const at = y * frame.nx + x;
        if (frame.mask[at] === 0 && !Number.isNaN(light[at])) levels.push(light[at]);
      }
      if (2 * levels.length < cellColumns) continue;
      const middle = x0 + (cellColumns - 1) / 2;
      cells.push({ x: middle, y, level: median(levels), variance: medianVariance(frame, middle, y, levels.length) });
    }
  }
  return cells;
}

/** Rows of which no lit fibre comes near in the columns from `x0` on: [ny] 0 or 1. */
function freeRows(tramlines: Tramlines, frame: Frame, x0: number): Uint8Array {
  const free = new Uint8Array(frame.ny).fill(1);
  const nCoef = tramlines.degree + 1;
  const { sigma, widthDegree } = tramlines.profile;
  for (let k = 0; k < tramlines.nFibre; k++) {
    if (tramlines.state[k] === "dead") continue;
    for (const x of [x0, x0 + cellColumns - 1]) {
      const t = legendreArgument(x, frame.nx);
      const y = legendreValue(tramlines.legendre, t, k * nCoef, nCoef);
      const reach = gapSigma * legendreValue(sigma, t, k * (widthDegree + 1), widthDegree + 1);
      const last = Math.min(Math.floor(y + reach), frame.ny - 1);
      for (let row = Math.max(Math.ceil(y - reach), 0); row <= last; row++) free[row] = 0;
    }
  }
  return free;
}

/** Variance of a median of n pixels, π/2 that of their mean (common practice), photons of the level not counted:
 * weights that followed the level would bias it low. */
function medianVariance(frame: Frame, x: number, y: number, n: number): number {
  const { noise, nx } = frame;
  const at = Math.round(x);
  const fixed = noise.fixedVarianceImage?.[y * nx + at] ?? noise.fixedVariance[noise.bandOfRow[y] * nx + at];
  return ((Math.PI / 2) * fixed) / n;
}

/** How many terms in y the cells support: the most for which every one of as many equal zones of the frame holds cells.
 * With fewer, as when only the slit's ends are seen, a surface would swing where the fibres are. */
function supportedOrders(cells: Cell[], ny: number): number {
  for (let n = largestY; n > 0; n--) {
    if (new Set(cells.map((cell) => Math.floor((n * cell.y) / ny))).size === n) return n;
  }
  return 0;
}

/** A cell with the surface's terms at its place: [nX × nY]. */
interface PlacedCell extends Cell {
  terms: Float64Array;
}

function fitSurface(all: Cell[], nX: number, nY: number, frame: Frame): BackgroundFit {
  const inY = Array.from({ length: frame.ny }, (_, y) => legendreBasis(legendreArgument(y, frame.ny), nY));
  const cells = all.map((cell): PlacedCell => {
    const inX = legendreBasis(legendreArgument(cell.x, frame.nx), nX);
    return {
      ...cell,
      terms: Float64Array.from({ length: nX * nY }, (_, i) => inX[Math.floor(i / nY)] * inY[cell.y][i % nY]),
    };
  });
  let kept = cells;
  let surface = solveSurface(kept, nX, nY);
  let rms = scatter(kept, surface);
  for (let round = 0; round < clipRounds; round++) {
    const next = cells.filter((cell) => Math.abs(residual(cell, surface)) <= clipSigma * rms);
    if (next.length === kept.length || next.length < 4 * nX * nY) break;
    kept = next;
    surface = solveSurface(kept, nX, nY);
    rms = scatter(kept, surface);
  }
  return { ...surface, nCell: kept.length, rms, warnings: [] };
}

/** Weighted least squares for the surface's coefficients; the normal matrix is small, its band the whole of it. */
function solveSurface(cells: PlacedCell[], nX: number, nY: number): SmoothBackground {
  const n = nX * nY;
  const normal = new Float64Array(n * n);
  const coefficients = new Float64Array(n);
  for (const cell of cells) {
    const { terms } = cell;
    for (let i = 0; i < n; i++) {
      coefficients[i] += (terms[i] * cell.level) / cell.variance;
      for (let j = 0; j <= i; j++) normal[i * n + i - j] += (terms[i] * terms[j]) / cell.variance;
    }
  }
  factorBand(normal, n, n - 1);
  solveBand(normal, n, n - 1, coefficients);
  return { nX, nY, coefficients };
}

function residual(cell: PlacedCell, surface: SmoothBackground): number {
  let left = cell.level;
  for (let i = 0; i < cell.terms.length; i++) left -= cell.terms[i] * surface.coefficients[i];
  return left;
}

/** Robust scatter (1.4826 × median of absolute values), so that a stray ghost does not widen the clip. */
function scatter(cells: PlacedCell[], surface: SmoothBackground): number {
  return 1.4826 * median(cells.map((cell) => Math.abs(residual(cell, surface))));
}
