/** A smooth background under the fibres as the rows tell it that no fibre reaches: slit ends, gaps between blocks, dead fibres.
 * A low-order Legendre surface, clipped. The fibres' wings are still in it; smooth.ts tells both apart. */
import type { Frame } from "../detector/frame.js";
import { factorBand, solveBand } from "../reference/banded.js";
import type { SmoothBackground } from "../reference/extract.js";
import { legendreArgument, legendreBasis } from "../reference/legendre.js";
import { medianInPlace } from "../reference/median.js";
import type { Tramlines } from "../tramlines/tramlines.js";

/** A pixel at this distance, in σ, holds 4e-5 to 7e-5 of a fibre's light: wider would leave no gap between most blocks. */
const gapSigma = 4.3;
/** Columns that one median is taken over. */
const cellColumns = 16;
/** Blocks of so many columns looked at, at most: evenly spread. */
const mostBlocks = 32;
const largestX = 3;
const largestY = 5;
const clipSigma = 3;
const clipRounds = 5;

/** The background as the gaps show it. */
export interface GapFit extends SmoothBackground {
  /** Medians that the surface goes through. */
  nCell: number;
  /** Their scatter about it, e⁻ per pixel. */
  rms: number;
  warnings: string[];
}

/** Medians over `cellColumns` columns of one row each: [n]. */
interface Cells {
  n: number;
  /** Pixels. */
  x: Float64Array;
  y: Float64Array;
  /** e⁻ */
  level: Float64Array;
  /** e⁻⁻² */
  weight: Float64Array;
}

/** No background at all: a flat 0. */
export function noBackground(): SmoothBackground {
  return { nX: 1, nY: 1, coefficients: Float64Array.of(0) };
}

/** Fits the background of `frame` between the tramlines. Without gaps to see it in it is 0, and a warning says so. */
export function fitBackground(frame: Frame, tramlines: Tramlines): GapFit {
  const cells = gapCells(frame, tramlines);
  const nY = supportedOrders(cells, frame.ny);
  const nX = Math.min(largestX, 1 + Math.floor(frame.nx / (4 * cellColumns)));
  if (nY < 1 || cells.n < 4 * nX * nY) {
    const warning = `${frame.name}: no gap between fibres is wide enough to see scattered light in, so none is taken off; faint fibres may hold some.`;
    return { ...noBackground(), nCell: cells.n, rms: Number.NaN, warnings: [warning] };
  }
  return fitSurface(cells, nX, nY, frame);
}

/** Medians over `cellColumns` columns of rows that stay clear of every lit fibre. */
function gapCells(frame: Frame, tramlines: Tramlines): Cells {
  const { nx, ny, mask, electrons } = frame;
  const nBlock = Math.floor(nx / cellColumns);
  const step = Math.max(1, nBlock / mostBlocks);
  const most = Math.ceil(nBlock / step) * ny;
  const empty = () => new Float64Array(most);
  const cells: Cells = { n: 0, x: empty(), y: empty(), level: empty(), weight: empty() };
  const free = new Uint8Array(ny);
  const levels = new Float64Array(cellColumns);
  for (let i = 0; i * step < nBlock; i++) {
    const x0 = Math.floor(i * step) * cellColumns;
    markFreeRows(tramlines, frame, x0, free);
    for (let y = 0; y < ny; y++) {
      if (free[y] === 0) continue;
      let n = 0;
      for (let at = y * nx + x0; at < y * nx + x0 + cellColumns; at++) {
        if (mask[at] === 0 && !Number.isNaN(electrons[at])) levels[n++] = electrons[at];
      }
      if (2 * n < cellColumns) continue;
      cells.x[cells.n] = x0 + (cellColumns - 1) / 2;
      cells.y[cells.n] = y;
      cells.level[cells.n] = medianInPlace(levels, n);
      cells.weight[cells.n++] = 1 / medianVariance(frame, x0 + cellColumns / 2, y, n);
    }
  }
  return cells;
}

/** Rows of which no lit fibre comes near in the columns from `x0` on: [ny] 0 or 1. */
function markFreeRows(tramlines: Tramlines, frame: Frame, x0: number, free: Uint8Array): void {
  free.fill(1);
  const { legendre, state, nFibre, degree } = tramlines;
  const { sigma, widthDegree } = tramlines.profile;
  for (const x of [x0, x0 + cellColumns - 1]) {
    const basis = legendreBasis(legendreArgument(x, frame.nx), Math.max(degree, widthDegree) + 1);
    for (let k = 0; k < nFibre; k++) {
      if (state[k] === "dead") continue;
      const y = series(legendre, basis, k, degree + 1);
      const reach = gapSigma * series(sigma, basis, k, widthDegree + 1);
      const last = Math.min(Math.floor(y + reach), frame.ny - 1);
      for (let row = Math.max(Math.ceil(y - reach), 0); row <= last; row++) free[row] = 0;
    }
  }
}

function series(coefficients: Float64Array, basis: Float64Array, k: number, n: number): number {
  let sum = 0;
  for (let j = 0; j < n; j++) sum += coefficients[k * n + j] * basis[j];
  return sum;
}

/** Variance of a median of n pixels, π/2 that of their mean (common practice), photons of the level not counted:
 * weights that followed the level would bias it low. */
function medianVariance({ noise, nx }: Frame, x: number, y: number, n: number): number {
  const fixed = noise.fixedVarianceImage?.[y * nx + x] ?? noise.fixedVariance[noise.bandOfRow[y] * nx + x];
  return ((Math.PI / 2) * fixed) / n;
}

/** How many terms in y the cells support: the most for which every one of as many equal zones of the frame holds cells.
 * With fewer, as when only the slit's ends are seen, a surface would swing where the fibres are. */
function supportedOrders({ n, y }: Cells, ny: number): number {
  for (let orders = largestY; orders > 0; orders--) {
    const zones = new Uint8Array(orders);
    for (let i = 0; i < n; i++) zones[Math.floor((orders * y[i]) / ny)] = 1;
    if (zones.every((seen) => seen === 1)) return orders;
  }
  return 0;
}

function fitSurface(cells: Cells, nX: number, nY: number, { nx, ny }: Frame): GapFit {
  const nTerm = nX * nY;
  const terms = new Float64Array(cells.n * nTerm);
  for (let at = 0; at < cells.n; at++) {
    const inX = legendreBasis(legendreArgument(cells.x[at], nx), nX);
    const inY = legendreBasis(legendreArgument(cells.y[at], ny), nY);
    for (let i = 0; i < nTerm; i++) terms[at * nTerm + i] = inX[(i / nY) | 0] * inY[i % nY];
  }
  const miss = new Float64Array(cells.n);
  const scratch = new Float64Array(cells.n);
  let used = new Uint8Array(cells.n).fill(1);
  let nUsed = cells.n;
  let coefficients = solveSurface(cells, terms, used, nTerm);
  let rms = scatter(cells, terms, used, coefficients, miss, scratch);
  for (let round = 0; round < clipRounds; round++) {
    const next = Uint8Array.from(miss, (value) => (value <= clipSigma * rms ? 1 : 0));
    const nNext = next.reduce((sum, one) => sum + one, 0);
    if (nNext === nUsed || nNext < 4 * nTerm) break;
    [used, nUsed] = [next, nNext];
    coefficients = solveSurface(cells, terms, used, nTerm);
    rms = scatter(cells, terms, used, coefficients, miss, scratch);
  }
  return { nX, nY, coefficients, nCell: nUsed, rms, warnings: [] };
}

/** Weighted least squares for the surface's coefficients; the normal matrix is small, its band the whole of it. */
function solveSurface({ n, level, weight }: Cells, terms: Float64Array, used: Uint8Array, nTerm: number): Float64Array {
  const normal = new Float64Array(nTerm * nTerm);
  const coefficients = new Float64Array(nTerm);
  for (let at = 0; at < n; at++) {
    if (used[at] === 0) continue;
    for (let i = 0; i < nTerm; i++) {
      const weighted = weight[at] * terms[at * nTerm + i];
      coefficients[i] += weighted * level[at];
      for (let j = 0; j <= i; j++) normal[i * nTerm + i - j] += weighted * terms[at * nTerm + j];
    }
  }
  factorBand(normal, nTerm, nTerm - 1);
  solveBand(normal, nTerm, nTerm - 1, coefficients);
  return coefficients;
}

/** Robust scatter (1.4826 × median of absolute values) of the cells in use, so that a stray ghost does not widen the clip;
 * what every cell misses by goes into `miss`. */
function scatter(
  { n, level }: Cells,
  terms: Float64Array,
  used: Uint8Array,
  coefficients: Float64Array,
  miss: Float64Array,
  scratch: Float64Array,
): number {
  const nTerm = coefficients.length;
  let nUsed = 0;
  for (let at = 0; at < n; at++) {
    let left = level[at];
    for (let i = 0; i < nTerm; i++) left -= terms[at * nTerm + i] * coefficients[i];
    miss[at] = Math.abs(left);
    if (used[at]) scratch[nUsed++] = miss[at];
  }
  return 1.4826 * medianInPlace(scratch, nUsed);
}
