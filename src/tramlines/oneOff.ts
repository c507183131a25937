/** Is the frame's light where the names say, or a whole fibre off? A shift of exactly one pitch leaves no slope to see; only the
 * slit's pattern tells: dead fibres, gaps between blocks, the slit's ends. So the frame is fitted three times, its fibres
 * taken to lie one position lower, where they are named, and one position higher, and the misfits are compared. */
import type { Frame } from "../detector/frame.js";
import type { Kernels } from "../kernels/module.js";
import type { SmoothBackground } from "../reference/extract.js";
import { median } from "../reference/median.js";
import type { ShapeTable } from "../reference/shape.js";
import { TraceError } from "./errors.js";
import { activeFibres, linesOf, profileTable } from "./profileTable.js";
import type { Lines } from "./shape/column.js";
import { frameColumn, widenBackground } from "./shape/refine.js";
import { backgroundColumn, settleColumn, wholeProfiles } from "./shape/step.js";
import type { Tramlines } from "./tramlines.js";

export interface OneOff {
  /** How much worse the frame fits when every fibre is taken one position lower, and one higher: difference of χ² in units of
   * the named reading's misfit per pixel, squares capped. The names are right when both are far above 0. */
  lower: number;
  higher: number;
}

const nColumn = 24;
/** A pixel's squared residual counts this much at most, σ²: a cosmic ray must not decide. */
const largestSquare = 100;
/** What the model's own error lets a pixel miss, as a share of its light. */
const modelError = 0.05;
/** Difference from which on another reading is excluded. */
const certain = 50;

/** So few fibres have no pattern to be read by. */
const fewest = 3;

/** Compares the three readings of `frame`, whose tramlines are already moved to its light; null for a slit of so few fibres
 * that nothing tells. */
export function compareOneOff(
  kernels: Kernels,
  frame: Frame,
  tramlines: Tramlines,
  background: SmoothBackground,
): OneOff | null {
  if (activeFibres(tramlines).length < fewest) return null;
  const table = profileTable(kernels, tramlines.profile);
  const smooth = widenBackground(background);
  const columns = Array.from({ length: nColumn }, (_, i) => Math.floor(((i + 0.37) * frame.nx) / nColumn));
  const [lower, named, higher] = [-1, 0, 1].map((step) => {
    const lines = linesOneOff(tramlines, step);
    return columns.map((x) => columnMisfit(frame, lines, table, smooth, x));
  });
  const total = (squares: Float64Array[]) =>
    squares.reduce((sum, column) => sum + column.reduce((s, v) => s + v, 0), 0);
  const perPixel = Math.max(1, median(named.flatMap((column) => Array.from(column))) / 0.4549);
  return { lower: (total(lower) - total(named)) / perPixel, higher: (total(higher) - total(named)) / perPixel };
}

/** @throws TraceError when another reading of the frame's fibres cannot be excluded. */
export function requireNamesFit(frame: Frame, { lower, higher }: OneOff): void {
  const worst = Math.min(lower, higher);
  if (worst >= certain) return;
  const how = worst < -certain ? "better" : "as well";
  const which = lower < higher ? "lower" : "higher";
  throw new TraceError(
    `${frame.name}: the light would fit ${how} with every fibre one position ${which} than where it is named (misfit ` +
      `${lower.toFixed(0)} lower, 0 as named, ${higher.toFixed(0)} higher), so its fibres cannot be named with certainty; ` +
      "trace a flat taken next to it, or trust the names (--trust-names; checkNames: false) if you know that nothing moved by a fibre.",
  );
}

/** Tramlines of the lit fibres, each where its neighbour `step` positions on runs; beyond a block's end, a pitch further. */
function linesOneOff(tramlines: Tramlines, step: number): Lines {
  const active = activeFibres(tramlines);
  const lines = linesOf(tramlines, active);
  if (step === 0) return lines;
  const { nTrace } = lines;
  const { legendre, block, nFibre } = tramlines;
  const sameBlock = (k: number, m: number) => m >= 0 && m < nFibre && block[m] === block[k];
  active.forEach((k, i) => {
    for (let c = 0; c < nTrace; c++) {
      const own = legendre[k * nTrace + c];
      if (sameBlock(k, k + step)) lines.trace[i * nTrace + c] = legendre[(k + step) * nTrace + c];
      else if (sameBlock(k, k - step)) lines.trace[i * nTrace + c] = 2 * own - legendre[(k - step) * nTrace + c];
    }
  });
  return lines;
}

/** Squared residuals over variance and model error of one column's good pixels, capped. */
function columnMisfit(frame: Frame, lines: Lines, table: ShapeTable, smooth: Float64Array, x: number): Float64Array {
  const data = frameColumn(frame, null, x);
  const profiles = wholeProfiles(lines, table, x);
  const under = backgroundColumn(smooth, x, lines);
  const level = data.light.map((light, y) => light - under[y]);
  const { model } = settleColumn(profiles, data, level, under);
  return Float64Array.from({ length: frame.ny }, (_, y) => {
    if (data.good[y] === 0) return 0;
    const seen = Math.max(level[y], 0);
    const variance = data.fixedVariance[y] + seen * data.variancePerElectron[y] + (modelError * seen) ** 2;
    return Math.min(((level[y] - model[y]) * (level[y] - model[y])) / variance, largestSquare);
  });
}
