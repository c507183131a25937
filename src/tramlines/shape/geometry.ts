/** The geometry step: where each fibre's light sits against its tramline, and how wide it is against its width, measured
 * jointly in many columns and put into the series. */

import { LegendreFitter } from "../../kernels/legendre.js";
import type { Kernels } from "../../kernels/module.js";
import { fitShapeColumns } from "../../kernels/shapeColumn.js";
import { legendreArgument, legendreValue } from "../../reference/legendre.js";
import type { ShapeTable } from "../../reference/shape.js";
import type { ColumnData } from "../../reference/shapeColumn.js";
import type { Lines } from "../../reference/shapeProfiles.js";

/** Shifts and changes of width of all fibres in one column, pixels, with their variances. */
export interface LocalGeometry {
  x: number;
  flux: Float64Array;
  shift: Float64Array;
  shiftVariance: Float64Array;
  widening: Float64Array;
  wideningVariance: Float64Array;
}

/** Joint fits of flux, shift and change of width of every fibre, column by column. */
export function measureColumns(
  kernels: Kernels,
  lines: Lines,
  table: ShapeTable,
  background: Float64Array,
  columns: ColumnData[],
): LocalGeometry[] {
  return fitShapeColumns(kernels, { lines, table, background, columns, nPar: 3 }).map(
    ({ x, flux, solution, variance }) => {
      const pick = (from: Float64Array, p: number) => flux.map((_, k) => from[3 * k + p]);
      return {
        x,
        flux: flux.map((f, k) => f + solution[3 * k]),
        shift: pick(solution, 1),
        shiftVariance: pick(variance, 1),
        widening: pick(solution, 2),
        wideningVariance: pick(variance, 2),
      };
    },
  );
}

/** Scatter that a fibre's shifts and widths have beyond their noise, pixels: keeps a few bright columns from ruling. */
const floorPixels = 0.002;
const kappa = 4;
const clipRounds = 6;
/** A column that knows a fibre's place or width no better than this, pixels, is left out: the fit is linear. */
const tellingError = 0.3;
/** A series gets as many terms as keep its own error below this, pixels. */
const seriesError = 0.02;
/** A tramline moves by less than this in one step, pixels: the fit is linear, and neighbours must not be run into. */
const largestShift = 0.5;
/** A fibre's width stays within these shares of the reference: what lies beyond is noise. */
const [narrowest, widest] = [0.7, 1.4];

/** How the measured places of every fibre lie about its series: [nFibre]. */
export interface TraceScatter {
  /** Pixels; NaN for a fibre whose light tells nothing. */
  rms: Float64Array;
  /** Columns in use. */
  nPoint: Int32Array;
}

/** Adds clipped Legendre fits of the measured shifts and widenings to the series of `lines`; dim fibres get fewer terms, or
 * none. `referenceWidth`: σ, pixels. */
export function applyGeometry(
  kernels: Kernels,
  lines: Lines,
  columns: LocalGeometry[],
  referenceWidth: number,
): TraceScatter {
  const scatter = { rms: new Float64Array(lines.nFibre).fill(Number.NaN), nPoint: new Int32Array(lines.nFibre) };
  const t = columns.map(({ x }) => legendreArgument(x, lines.nx));
  const fitter = new LegendreFitter(kernels, columns.length, Math.max(lines.nTrace, lines.nWidth));
  for (let k = 0; k < lines.nFibre; k++) {
    const shift = fitChange(
      fitter,
      t,
      columns,
      ({ shift, shiftVariance }) => [shift[k], shiftVariance[k]],
      lines.nTrace,
    );
    const widening = fitChange(
      fitter,
      t,
      columns,
      ({ widening, wideningVariance }) => [widening[k], wideningVariance[k]],
      lines.nWidth,
    );
    const believable = shift.nPoint > 0 && t.every((at) => Math.abs(legendreValue(shift.coef, at)) < largestShift);
    if (believable) {
      for (let i = 0; i < shift.coef.length; i++) lines.trace[k * lines.nTrace + i] += shift.coef[i];
      scatter.rms[k] = shift.rms;
      scatter.nPoint[k] = shift.nPoint;
    }
    const width = lines.width.slice(k * lines.nWidth, (k + 1) * lines.nWidth);
    for (let i = 0; i < widening.coef.length; i++) width[i] += widening.coef[i];
    const sane = t.every((at) => {
      const share = legendreValue(width, at) / referenceWidth;
      return share > narrowest && share < widest;
    });
    if (sane) lines.width.set(width, k * lines.nWidth);
  }
  return scatter;
}

/** Coefficients of one fibre's measured changes: as many as its light allows, none when it tells nothing. */
function fitChange(
  fitter: LegendreFitter,
  t: number[],
  columns: LocalGeometry[],
  pick: (column: LocalGeometry) => [value: number, variance: number],
  nTerm: number,
): { coef: Float64Array; rms: number; nPoint: number } {
  const nothing = { coef: new Float64Array(0), rms: Number.NaN, nPoint: 0 };
  const points = columns.map(pick);
  const telling = points.map(([value, variance]) =>
    Number.isFinite(value) && variance > 0 && variance < tellingError * tellingError ? 1 : 0,
  );
  const weight = points.map(([, variance], i) => (telling[i] ? 1 / (variance + floorPixels * floorPixels) : 0));
  const nPoint = telling.filter(Boolean).length;
  if (nPoint < 4) return nothing;
  const information = weight.reduce((sum, w) => sum + w, 0);
  const supported = Math.floor(Math.min(nPoint / 3, seriesError * seriesError * information));
  if (supported < 1) return nothing;
  const values = points.map(([value], i) => (telling[i] ? value : 0));
  const fit = fitter.fit(t, values, weight, Math.min(nTerm, supported), kappa, clipRounds);
  let squares = 0;
  for (let i = 0; i < t.length; i++) if (fit.used[i]) squares += (values[i] - legendreValue(fit.coef, t[i])) ** 2;
  return { coef: fit.coef, rms: Math.sqrt(squares / fit.nUsed), nPoint: fit.nUsed };
}
