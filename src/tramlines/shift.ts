/** Where a science frame's light sits against the flat's tramlines: a slow surface
 *
 *     δ(x, y) = c₀ + c₁·x + c₂·y,   x, y ∈ [−1, 1] over the frame,   pixels
 *
 * measured from the frame's own light: in some columns every fibre's flux and shift are fitted jointly, and the surface is put
 * through the shifts, clipped, until it no longer moves. */
import type { Frame } from "../detector/frame.js";
import type { Kernels } from "../kernels/module.js";
import { factorBand, inverseBand, solveBand } from "../reference/banded.js";
import type { SmoothBackground } from "../reference/extract.js";
import { legendreArgument, legendreValue } from "../reference/legendre.js";
import { median } from "../reference/median.js";
import type { ShapeTable } from "../reference/shape.js";
import { activeFibres, linesOf, profileTable } from "./profileTable.js";
import { type Lines, solveLocal } from "./shape/column.js";
import { frameColumn, widenBackground } from "./shape/refine.js";
import { backgroundColumn, settleColumn, wholeProfiles } from "./shape/step.js";
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
const nColumn = 48;
const turns = 4;
/** A fibre tells where it is from this flux on, e⁻ per column, and this many σ. */
const leastFlux = 300;
const leastSigma = 10;
const clipSigma = 4;
/** What a column's shift is not known better than, pixels: the profile is not perfect. */
const floorPixels = 0.003;
/** Points without which there is no telling. */
const leastPoints = 24;
const coarseStep = 0.5;

interface Point {
  x: number;
  y: number;
  shift: number;
  variance: number;
}

/** Measures the shift; null when too little of the frame's light can tell. */
export function measureShift(
  kernels: Kernels,
  frame: Frame,
  tramlines: Tramlines,
  background: SmoothBackground,
): Shift | null {
  const table = profileTable(kernels, tramlines.profile);
  const original = linesOf(tramlines, activeFibres(tramlines));
  const smooth = widenBackground(background);
  const columns = Array.from({ length: nColumn }, (_, i) => Math.floor(((i + 0.5) * frame.nx) / nColumn));
  const sum: [number, number, number] = [coarseShift(frame, original), 0, 0];
  let last: Shift | null = null;
  for (let turn = 0; turn < turns; turn++) {
    const lines = shiftedLines(original, sum);
    const points = columns.flatMap((x) => columnShifts(frame, lines, table, smooth, x));
    if (points.length < leastPoints) return null;
    const step = fitSurface(points);
    for (let i = 0; i < nTerm; i++) sum[i] += step.coefficients[i];
    last = { ...step, coefficients: [...sum] };
    if (step.coefficients.every((c) => Math.abs(c) < 1e-5)) break;
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
function coarseShift(frame: Frame, lines: Lines): number {
  const middle = Array.from({ length: lines.nFibre }, (_, k) =>
    legendreValue(lines.trace, 0, k * lines.nTrace, lines.nTrace),
  );
  const pitch = median(middle.slice(1).map((y, k) => y - middle[k]));
  let [best, most] = [0, Number.NEGATIVE_INFINITY];
  for (let s = -Math.floor(pitch / 2 / coarseStep); s <= Math.floor(pitch / 2 / coarseStep); s++) {
    const light = lightAlong(frame, lines, s * coarseStep);
    if (light > most) [best, most] = [s * coarseStep, light];
  }
  return Math.abs(best) <= 2 * coarseStep ? 0 : best;
}

function lightAlong(frame: Frame, lines: Lines, shift: number): number {
  let sum = 0;
  for (let i = 0; i < nColumn; i++) {
    const x = Math.floor(((i + 0.5) * frame.nx) / nColumn);
    const t = legendreArgument(x, frame.nx);
    const light: number[] = [];
    for (let k = 0; k < lines.nFibre; k++) {
      const y = Math.round(legendreValue(lines.trace, t, k * lines.nTrace, lines.nTrace) + shift);
      const at = y * frame.nx + x;
      if (y >= 0 && y < frame.ny && frame.mask[at] === 0) light.push(Math.sqrt(Math.max(frame.electrons[at], 0)));
    }
    sum += light.reduce((total, value) => total + value, 0);
  }
  return sum;
}

/** Shifts of the fibres with light enough, in one column. */
function columnShifts(frame: Frame, lines: Lines, table: ShapeTable, smooth: Float64Array, x: number): Point[] {
  const data = frameColumn(frame, null, x);
  const profiles = wholeProfiles(lines, table, x);
  const under = backgroundColumn(smooth, x, lines);
  const level = data.light.map((light, y) => light - under[y]);
  const { flux, model } = settleColumn(profiles, data, level, under);
  const residual = level.map((light, y) => light - model[y]);
  const local = solveLocal(profiles, flux, residual, data.inverseVariance, 2);
  const points: Point[] = [];
  for (let k = 0; k < lines.nFibre; k++) {
    const [fluxVariance, variance] = [local.variance[2 * k], local.variance[2 * k + 1]];
    const enough = flux[k] > leastFlux && flux[k] * flux[k] > leastSigma * leastSigma * fluxVariance;
    if (enough && variance > 0) {
      points.push({
        x: legendreArgument(x, lines.nx),
        y: legendreArgument(profiles.centre[k], lines.ny),
        shift: local.value[2 * k + 1],
        variance,
      });
    }
  }
  return points;
}

/** Weighted least squares for the surface, points beyond 4 robust scatters left out. */
function fitSurface(points: Point[]): Shift {
  let kept = points;
  let fit = solveSurface(kept);
  for (let round = 0; round < 8; round++) {
    const scatter = robustScatter(kept, fit.coefficients);
    const next = points.filter((point) => {
      const off = residualOf(point, fit.coefficients);
      return off * off <= clipSigma * clipSigma * scatter * scatter * (point.variance + floorPixels * floorPixels);
    });
    if (next.length === kept.length || next.length < leastPoints) break;
    kept = next;
    fit = solveSurface(kept);
  }
  const scatter = robustScatter(kept, fit.coefficients);
  const errors = fit.errors.map((error) => error * scatter) as [number, number, number];
  const rms = 1.4826 * median(kept.map((point) => Math.abs(residualOf(point, fit.coefficients))));
  return { coefficients: fit.coefficients, errors, nPoint: kept.length, rms };
}

function solveSurface(points: Point[]): { coefficients: [number, number, number]; errors: number[] } {
  const band = new Float64Array(nTerm * nTerm);
  const rhs = new Float64Array(nTerm);
  for (const point of points) {
    const terms = [1, point.x, point.y];
    const weight = 1 / (point.variance + floorPixels * floorPixels);
    for (let i = 0; i < nTerm; i++) {
      rhs[i] += weight * terms[i] * point.shift;
      for (let j = 0; j <= i; j++) band[i * nTerm + i - j] += weight * terms[i] * terms[j];
    }
  }
  factorBand(band, nTerm, nTerm - 1);
  solveBand(band, nTerm, nTerm - 1, rhs);
  const inverse = inverseBand(band, nTerm, nTerm - 1);
  const errors = [0, 1, 2].map((i) => Math.sqrt(inverse[i * nTerm]));
  return { coefficients: [rhs[0], rhs[1], rhs[2]], errors };
}

function residualOf(point: Point, [c0, c1, c2]: [number, number, number]): number {
  return point.shift - c0 - c1 * point.x - c2 * point.y;
}

/** Robust scatter of the points in units of their expected one; at least 1. */
function robustScatter(points: Point[], coefficients: [number, number, number]): number {
  const pulls = points.map(
    (point) => Math.abs(residualOf(point, coefficients)) / Math.sqrt(point.variance + floorPixels * floorPixels),
  );
  return Math.max(1, 1.4826 * median(pulls));
}
