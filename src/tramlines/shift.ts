/** Where a science frame's light sits against the flat's tramlines: a slow surface
 *
 *     δ(x, y) = c₀ + c₁·x + c₂·y,   x, y ∈ [−1, 1] over the frame,   pixels
 *
 * measured from the frame's own light: in some columns every fibre's flux and shift are fitted jointly, and the surface is put
 * through the shifts, clipped, until it no longer moves. */
import type { Frame } from "../detector/frame.js";
import { type ColumnFits, type ColumnSample, groupColumns } from "../kernels/columnFit.js";
import type { Kernels } from "../kernels/module.js";
import { factorBand, inverseBand, solveBand } from "../reference/banded.js";
import type { SmoothBackground } from "../reference/extract.js";
import { legendreArgument, legendreBasis, legendreValue } from "../reference/legendre.js";
import { median, medianInPlace } from "../reference/median.js";
import type { Lines } from "../reference/shapeProfiles.js";
import { backgroundTurn } from "./backgroundTurn.js";
import { everyGroup, type SampleSize, sampleColumns } from "./columnSample.js";
import { activeFibres, linesOf } from "./profileTable.js";
import type { Tramlines } from "./tramlines.js";

export interface Shift {
  /** c₀, c₁, c₂: pixels. */
  coefficients: [number, number, number];
  /** Their standard errors, pixels. */
  errors: [number, number, number];
  /** Shifts that the surface goes through, and their robust scatter about it, pixels. */
  nPoint: number;
  rms: number;
}

const nTerm = 3;
/** Columns looked at. */
export const shiftSample: SampleSize = { nGroup: 12, together: 2 };
/** The first turns look at every fourth of them, if the frame has fibres by the hundreds. */
const coarseTurns = 2;
const coarseStepGroups = 4;
const manyFibres = 400;
const turns = 4;
/** A turn that moves no term by more than this, pixels, is the last: what it leaves is smaller by the square. */
const settledPixels = 1e-3;
/** A fibre tells where it is from this flux on, e⁻ per column, and this many σ. */
const leastFlux = 300;
const leastSigma = 10;
const clipSigma = 4;
const clipRounds = 8;
/** What a column's shift is not known better than, pixels: the profile is not perfect. */
const floorPixels = 0.003;
/** What no model of the light gets better than, as a share of it. */
const modelError = 0.003;
/** Points without which there is no telling. */
const leastPoints = 24;
const coarseStep = 0.5;

/** Shifts of single fibres in single groups of columns: the first n of each. */
interface Points {
  n: number;
  x: Float64Array;
  y: Float64Array;
  shift: Float64Array;
  /** Σ 1 / (variance + floor²) over the columns */
  weight: Float64Array;
  /** 1 where the surface goes through the point; what the next round says of it. */
  used: Uint8Array;
  next: Uint8Array;
  scratch: Float64Array;
}

/** Measures the shift; null when too little of the frame's light can tell. `background`: where it is known; else it is fitted
 * on the way. `sample`: of this frame. */
export function measureShift(
  kernels: Kernels,
  frame: Frame,
  tramlines: Tramlines,
  background?: SmoothBackground,
  sample = sampleColumns(kernels, frame, tramlines, shiftSample),
): Shift | null {
  const original = linesOf(tramlines, activeFibres(tramlines));
  const tells = new Uint8Array(original.nFibre).fill(1);
  const coarse = everyGroup(sample, original.nFibre >= manyFibres ? coarseStepGroups : 1);
  const points = roomForPoints(sample.nGroup * original.nFibre);
  const sum: [number, number, number] = [coarseShift(sample, coarse, original), 0, 0];
  let under = background ?? { nX: 1, nY: 1, coefficients: Float64Array.of(0) };
  let last: Shift | null = null;
  for (let turn = 0; turn < turns; turn++) {
    const lines = shiftedLines(original, sum);
    const groups = turn < coarseTurns ? coarse : everyGroup(sample, 1);
    // On lines that are far off, a background would take what they miss.
    const normal = background === undefined && turn > 0 && turn < turns - 1;
    const fits = sample.fit(lines, { groups, background: under, tells, profileError: modelError, normal });
    findPoints(points, fits, sample, lines);
    if (points.n < leastPoints) return null;
    const step = fitSurface(points);
    for (let i = 0; i < nTerm; i++) sum[i] += step.coefficients[i];
    last = { ...step, coefficients: [...sum] };
    if (turn >= coarseTurns && step.coefficients.every((c) => Math.abs(c) < settledPixels)) break;
    if (normal) under = backgroundTurn(sample, fits, under);
  }
  return last;
}

/** The same tramlines moved by `shift`. */
export function shiftTramlines(tramlines: Tramlines, shift: Shift): Tramlines {
  const all = linesOf(tramlines, Array.from(tramlines.state.keys()));
  return { ...tramlines, legendre: shiftedLines(all, shift.coefficients).trace };
}

/** δ at column x of a fibre that runs at y, pixels. */
export function shiftAt({ coefficients: [c0, c1, c2] }: Shift, x: number, y: number, nx: number, ny: number): number {
  return c0 + c1 * legendreArgument(x, nx) + c2 * legendreArgument(y, ny);
}

function shiftedLines(lines: Lines, [c0, c1, c2]: [number, number, number]): Lines {
  const { nTrace, ny } = lines;
  const trace = lines.trace.slice();
  const perPixel = (2 * c2) / (ny - 1);
  for (let at = 0; at < trace.length; at += nTrace) {
    // δ is linear in y, so it moves every coefficient of y(x) alike.
    for (let i = 0; i < nTrace; i++) trace[at + i] *= 1 + perPixel;
    trace[at] += c0 - c2;
    if (nTrace > 1) trace[at + 1] += c1;
  }
  return { ...lines, trace };
}

/** The whole frame's shift to half a pixel, within half a pitch: where the light on the tramlines is greatest. */
function coarseShift(sample: ColumnSample, groups: Int32Array, lines: Lines): number {
  const middle = Array.from({ length: lines.nFibre }, (_, k) =>
    legendreValue(lines.trace, 0, k * lines.nTrace, lines.nTrace),
  );
  const pitch = median(middle.slice(1).map((y, k) => y - middle[k]));
  const reach = Math.floor(pitch / 2 / coarseStep);
  const light = lightAlong(sample, groups, lines, reach);
  let best = -reach;
  for (let s = -reach; s <= reach; s++) if (light[s + reach] > light[best + reach]) best = s;
  return Math.abs(best) <= 2 ? 0 : best * coarseStep;
}

/** Σ √light on the tramlines moved by s steps, s = −reach … reach. */
function lightAlong(
  { ny, nx, firstColumns, light }: ColumnSample,
  groups: Int32Array,
  lines: Lines,
  reach: number,
): Float64Array {
  const sum = new Float64Array(Math.max(0, 2 * reach) + 1);
  for (const g of groups) {
    const t = legendreArgument(firstColumns[g] + (groupColumns - 1) / 2, nx);
    for (let k = 0; k < lines.nFibre; k++) {
      const centre = legendreValue(lines.trace, t, k * lines.nTrace, lines.nTrace);
      for (let s = -reach; s <= reach; s++) {
        const y = Math.round(centre + s * coarseStep);
        if (y < 0 || y >= ny) continue;
        const at = (g * ny + y) * groupColumns;
        for (let c = 0; c < groupColumns; c += 2) if (light[at + c] > 0) sum[s + reach] += Math.sqrt(light[at + c]);
      }
    }
  }
  return sum;
}

function roomForPoints(most: number): Points {
  const room = () => new Float64Array(most);
  const [used, next] = [new Uint8Array(most), new Uint8Array(most)];
  return { n: 0, x: room(), y: room(), shift: room(), weight: room(), used, next, scratch: room() };
}

/** Shifts of the fibres with light enough, their mean over the columns of a group. */
function findPoints(points: Points, fits: ColumnFits, { nx, ny, firstColumns }: ColumnSample, lines: Lines): void {
  const { nFibre, trace, nTrace } = lines;
  const { flux: flux32, shiftVariance: variance32 } = fits;
  let n = 0;
  for (const g of fits.groups) {
    const x = legendreArgument(firstColumns[g] + (groupColumns - 1) / 2, nx);
    const basis = legendreBasis(x, nTrace);
    for (let k = 0; k < nFibre; k++) {
      let centre = 0;
      for (let j = 0; j < nTrace; j++) centre += basis[j] * trace[k * nTrace + j];
      let weight = 0;
      let moment = 0;
      for (let at = (g * nFibre + k) * groupColumns; at < (g * nFibre + k + 1) * groupColumns; at++) {
        const flux = flux32[at];
        const variance = variance32[at];
        const enough = flux > leastFlux && flux * flux > leastSigma * leastSigma * fits.fluxVariance[at];
        if (!enough || !(variance > 0)) continue;
        const own = 1 / (variance + floorPixels * floorPixels);
        weight += own;
        moment += own * fits.shift[at];
      }
      if (weight === 0) continue;
      points.x[n] = x;
      points.y[n] = legendreArgument(centre, ny);
      points.shift[n] = moment / weight;
      points.weight[n++] = weight;
    }
  }
  points.n = n;
}

/** Weighted least squares for the surface, points beyond 4 robust scatters left out. */
function fitSurface(points: Points): Shift {
  const { n, used, next, weight, scratch } = points;
  used.fill(1, 0, n);
  let nUsed = n;
  let fit = solveSurface(points);
  let scatter = robustScatter(points, fit.coefficients);
  for (let round = 0; round < clipRounds; round++) {
    const limit = clipSigma * clipSigma * scatter * scatter;
    let nNext = 0;
    let nChanged = 0;
    for (let i = 0; i < n; i++) {
      const off = residualOf(points, i, fit.coefficients);
      next[i] = off * off * weight[i] <= limit ? 1 : 0;
      nNext += next[i];
      nChanged += next[i] === used[i] ? 0 : 1;
    }
    if (nChanged === 0 || nNext < leastPoints) break;
    used.set(next);
    nUsed = nNext;
    fit = solveSurface(points);
    scatter = robustScatter(points, fit.coefficients);
  }
  const errors = fit.errors.map((error) => error * scatter) as [number, number, number];
  let m = 0;
  for (let i = 0; i < n; i++) if (used[i]) scratch[m++] = Math.abs(residualOf(points, i, fit.coefficients));
  return { coefficients: fit.coefficients, errors, nPoint: nUsed, rms: 1.4826 * medianInPlace(scratch, m) };
}

function solveSurface(points: Points): { coefficients: [number, number, number]; errors: number[] } {
  const { n, x, y, shift, weight, used } = points;
  let w0 = 0;
  let wx = 0;
  let wy = 0;
  let wxx = 0;
  let wxy = 0;
  let wyy = 0;
  const rhs = new Float64Array(nTerm);
  for (let at = 0; at < n; at++) {
    if (used[at] === 0) continue;
    const w = weight[at];
    w0 += w;
    wx += w * x[at];
    wy += w * y[at];
    wxx += w * x[at] * x[at];
    wxy += w * x[at] * y[at];
    wyy += w * y[at] * y[at];
    rhs[0] += w * shift[at];
    rhs[1] += w * x[at] * shift[at];
    rhs[2] += w * y[at] * shift[at];
  }
  // Rows from the diagonal downwards, as banded.ts has them.
  const band = Float64Array.of(w0, 0, 0, wxx, wx, 0, wyy, wxy, wy);
  factorBand(band, nTerm, nTerm - 1);
  solveBand(band, nTerm, nTerm - 1, rhs);
  const inverse = inverseBand(band, nTerm, nTerm - 1);
  const errors = [0, 1, 2].map((i) => Math.sqrt(inverse[i * nTerm]));
  return { coefficients: [rhs[0], rhs[1], rhs[2]], errors };
}

function residualOf({ shift, x, y }: Points, at: number, c: readonly number[]): number {
  return shift[at] - c[0] - c[1] * x[at] - c[2] * y[at];
}

/** Robust scatter of the points in use in units of their expected one; at least 1. */
function robustScatter(points: Points, coefficients: [number, number, number]): number {
  const { scratch, used, weight } = points;
  let n = 0;
  for (let i = 0; i < points.n; i++) {
    if (used[i]) scratch[n++] = Math.abs(residualOf(points, i, coefficients)) * Math.sqrt(weight[i]);
  }
  return Math.max(1, 1.4826 * medianInPlace(scratch, n));
}
