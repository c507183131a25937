/** The geometry step: where each fibre's light sits against its tramline, and how wide it is against its width, measured
 * jointly in many columns and put into the series. */

import { LegendreFitter } from "../../kernels/legendre.js";
import type { Kernels } from "../../kernels/module.js";
import { factorBand, inverseBand, solveBand } from "../../reference/banded.js";
import { legendreArgument } from "../../reference/legendre.js";
import type { ShapeTable } from "../../reference/shape.js";
import { type ColumnData, type Lines, localDesign, localSystem } from "./column.js";
import { backgroundColumn, settleColumn, wholeProfiles } from "./step.js";

/** Shifts and changes of width of all fibres in one column, pixels, with their variances. */
export interface LocalGeometry {
  x: number;
  flux: Float64Array;
  shift: Float64Array;
  shiftVariance: Float64Array;
  widening: Float64Array;
  wideningVariance: Float64Array;
}

/** Joint fit of flux, shift and change of width of every fibre in one column. */
export function measureColumn(
  lines: Lines,
  table: ShapeTable,
  background: Float64Array,
  data: ColumnData,
): LocalGeometry {
  const profiles = wholeProfiles(lines, table, data.x);
  const smooth = backgroundColumn(background, data.x, lines);
  const level = data.light.map((light, y) => light - smooth[y]);
  const { flux, model } = settleColumn(profiles, data, level, smooth);
  const residual = level.map((light, y) => light - model[y]);
  const { band, rhs, halfBandwidth } = localSystem(
    profiles,
    localDesign(profiles, flux, 3),
    residual,
    data.inverseVariance,
    3,
  );
  factorBand(band, rhs.length, halfBandwidth);
  solveBand(band, rhs.length, halfBandwidth, rhs);
  const inverse = inverseBand(band, rhs.length, halfBandwidth);
  const pick = (p: number) => flux.map((_, k) => rhs[3 * k + p]);
  const variance = (p: number) => flux.map((_, k) => inverse[(3 * k + p) * (halfBandwidth + 1)]);
  return {
    x: data.x,
    flux: flux.map((f, k) => f + rhs[3 * k]),
    shift: pick(1),
    shiftVariance: variance(1),
    widening: pick(2),
    wideningVariance: variance(2),
  };
}

/** Scatter that a fibre's shifts and widths have beyond their noise, pixels: keeps a few bright columns from ruling. */
const floorPixels = 0.002;
const kappa = 4;
const clipRounds = 6;

/** Adds clipped Legendre fits of the measured shifts and widenings to the series of `lines`. Returns the scatter of the
 * shifts about their series, robust, pixels. */
export function applyGeometry(kernels: Kernels, lines: Lines, columns: LocalGeometry[]): void {
  const t = columns.map(({ x }) => legendreArgument(x, lines.nx));
  const fitter = new LegendreFitter(kernels, columns.length, Math.max(lines.nTrace, lines.nWidth));
  const weight = (variance: number) => (variance > 0 ? 1 / (variance + floorPixels * floorPixels) : 0);
  for (let k = 0; k < lines.nFibre; k++) {
    const shift = fitter.fit(
      t,
      columns.map((column) => column.shift[k]),
      columns.map((column) => weight(column.shiftVariance[k])),
      lines.nTrace,
      kappa,
      clipRounds,
    );
    const widening = fitter.fit(
      t,
      columns.map((column) => column.widening[k]),
      columns.map((column) => weight(column.wideningVariance[k])),
      lines.nWidth,
      kappa,
      clipRounds,
    );
    for (let i = 0; i < lines.nTrace; i++) lines.trace[k * lines.nTrace + i] += shift.coef[i];
    for (let i = 0; i < lines.nWidth; i++) lines.width[k * lines.nWidth + i] += widening.coef[i];
  }
}
