/** Is the frame's light where the names say, or a whole fibre off? A shift of exactly one pitch leaves no slope to see; only the
 * slit's pattern tells: dead fibres, gaps between blocks, the slit's ends. So the frame is fitted three times, its fibres
 * taken to lie one position lower, where they are named, and one position higher, and the misfits are compared. */
import type { Frame } from "../detector/frame.js";
import { type ColumnSample, groupColumns } from "../kernels/columnFit.js";
import type { Kernels } from "../kernels/module.js";
import type { SmoothBackground } from "../reference/extract.js";
import { legendreArgument, legendreBasis, legendreValue } from "../reference/legendre.js";
import { medianInPlace } from "../reference/median.js";
import type { Lines } from "../reference/shapeProfiles.js";
import { everyGroup, type SampleSize, sampleColumns } from "./columnSample.js";
import { TraceError } from "./errors.js";
import { activeFibres, linesOf } from "./profileTable.js";
import type { Tramlines } from "./tramlines.js";

export interface OneOff {
  /** How much worse the frame fits when every fibre is taken one position lower, and one higher: difference of χ² in units of
   * the named reading's misfit per pixel, squares capped. The names are right when both are far above 0. */
  lower: number;
  higher: number;
}

/** Columns that are compared, at the most; a third less of a slit of hundreds of fibres. */
const compared: SampleSize = { nGroup: 6, together: 1 };
const manyFibres = 400;
const ofMany = 4;
/** Of the fit, as in shift.ts. */
const fitError = 0.003;
/** A pixel's squared residual counts this much at most, σ²: a cosmic ray must not decide. */
const largestSquare = 100;
/** What the model's own error lets a pixel miss, as a share of its light. */
const modelError = 0.05;
/** Difference from which on another reading is excluded. */
const certain = 50;

/** So few fibres have no pattern to be read by. */
const fewest = 3;

/** Compares the three readings of `frame`, whose tramlines are already moved to its light; null for a slit of so few fibres
 * that nothing tells. `sample`: of this frame. */
export function compareOneOff(
  kernels: Kernels,
  frame: Frame,
  tramlines: Tramlines,
  background: SmoothBackground,
  sample = sampleColumns(kernels, frame, tramlines, compared),
): OneOff | null {
  const { length } = activeFibres(tramlines);
  if (length < fewest) return null;
  const most = length < manyFibres ? compared.nGroup : ofMany;
  const groups = everyGroup(sample, Math.max(1, Math.floor(sample.nGroup / most)));
  const weights = inverseVariances(sample, groups, background);
  const squares = new Float64Array(weights.length);
  const [lower, higher, named] = [-1, 1, 0].map((step) => {
    sample.fit(linesOneOff(tramlines, step), { groups, background, profileError: fitError, residual: true });
    return misfit(sample, groups, weights, squares);
  });
  const perPixel = Math.max(1, medianInPlace(squares, squares.length) / 0.4549); // of the named reading, the last
  return { lower: (lower - named) / perPixel, higher: (higher - named) / perPixel };
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

/** One over variance and model error, by the data: [groups × ny × 4] e⁻⁻², 0 where a pixel is not good. */
function inverseVariances(
  { nx, ny, firstColumns, light, fixed, bandOfRow, perElectron }: ColumnSample,
  groups: Int32Array,
  { nX, nY, coefficients }: SmoothBackground,
): Float64Array {
  const weights = new Float64Array(groups.length * ny * groupColumns);
  const series = new Float64Array(nY);
  const nFixed = fixed.length / firstColumns.length / groupColumns;
  let to = 0;
  for (const g of groups) {
    const inX = legendreBasis(legendreArgument(firstColumns[g] + (groupColumns - 1) / 2, nx), nX);
    series.fill(0);
    for (let i = 0; i < nX; i++) for (let j = 0; j < nY; j++) series[j] += inX[i] * coefficients[i * nY + j];
    for (let y = 0; y < ny; y++) {
      const under = legendreValue(series, legendreArgument(y, ny), 0, nY);
      const fixedRow = g * nFixed + (bandOfRow === null ? y : bandOfRow[y]);
      for (let c = 0; c < groupColumns; c++) {
        const at = (g * ny + y) * groupColumns + c;
        const seen = Math.max(light[at] - under, 0);
        const photons = perElectron === null ? seen : seen * perElectron[at];
        const variance = fixed[fixedRow * groupColumns + c] + photons + modelError * modelError * seen * seen;
        weights[to++] = variance > 0 ? 1 / variance : 0; // NaN where not good
      }
    }
  }
  return weights;
}

/** Σ of the fit's squared residuals, weighted and capped; each of them goes into `squares`. */
function misfit(
  { ny, residual }: ColumnSample,
  groups: Int32Array,
  weights: Float64Array,
  squares: Float64Array,
): number {
  let sum = 0;
  let to = 0;
  for (const g of groups) {
    for (let at = g * ny * groupColumns; at < (g + 1) * ny * groupColumns; at++) {
      const square = Math.min(residual[at] * residual[at] * weights[to], largestSquare);
      squares[to++] = square;
      sum += square;
    }
  }
  return sum;
}
