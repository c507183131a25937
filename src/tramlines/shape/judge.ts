/** How well a profile model tells what it has not seen: columns of the flat that no model was fitted to. There only the
 * fibres' fluxes are fitted; form, lines, widths and the background stay as other columns made them. */
import type { Kernels } from "../../kernels/module.js";
import type { ShapeTable } from "../../reference/shape.js";
import type { Flat } from "../flat.js";
import type { ShapeBasis } from "./basis.js";
import type { Lines } from "./column.js";
import { fittingColumns, judgingColumns } from "./columns.js";
import { flatColumn } from "./measure.js";
import { backgroundColumn, nBackground, ShapeNormal, type ShapeState, settleColumn, wholeProfiles } from "./step.js";

/** Squared residuals count up to this many variances: a cosmic ray or a bad pixel must not judge. */
const mostSquare = 36;
const backgroundColumns = 40;
const backgroundRounds = 2;

/** What the judged columns show of one model. */
export interface Judged {
  /** e⁻, per column [ny]. */
  residual: Float64Array;
  /** e⁻⁻², 0 for a bad pixel. */
  inverseVariance: Float64Array;
  /** e⁻, the fibres alone. */
  model: Float64Array;
}

/** The held-out columns one by one. `background`: as ShapeState has it. */
export function* judgeColumns(
  flat: Flat,
  lines: Lines,
  table: ShapeTable,
  background: Float64Array,
): Generator<Judged> {
  for (const x of judgingColumns(flat.nx)) {
    const data = flatColumn(flat, x);
    const profiles = wholeProfiles(lines, table, x);
    const under = backgroundColumn(background, x, lines);
    const level = data.light.map((light, y) => light - under[y]);
    const { model } = settleColumn(profiles, data, level, under);
    yield { residual: level.map((light, y) => light - model[y]), inverseVariance: data.inverseVariance, model };
  }
}

/** Squared residuals over their variances in each held-out column, per degree of freedom: 1 for the true profile. */
export function heldOutMisfits(flat: Flat, lines: Lines, table: ShapeTable, background: Float64Array): Float64Array {
  const misfits: number[] = [];
  for (const { residual, inverseVariance } of judgeColumns(flat, lines, table, background)) {
    let [sum, freedom] = [0, -lines.nFibre];
    for (let y = 0; y < residual.length; y++) {
      if (inverseVariance[y] === 0) continue;
      sum += Math.min(residual[y] * residual[y] * inverseVariance[y], mostSquare);
      freedom++;
    }
    if (freedom > 0) misfits.push(sum / freedom);
    else misfits.push(Number.NaN);
  }
  return Float64Array.from(misfits);
}

/** Mean over the finite values, and its standard error from their own scatter. */
export function meanWithError(values: Float64Array): { mean: number; error: number } {
  const finite = values.filter(Number.isFinite);
  const n = finite.length;
  const mean = finite.reduce((sum, value) => sum + value, 0) / n;
  const squares = finite.reduce((sum, value) => sum + (value - mean) ** 2, 0);
  return { mean, error: Math.sqrt(squares / (n * (n - 1))) };
}

/** The smooth background that suits profiles of a fixed form: as ShapeState has it. */
export function backgroundUnder(kernels: Kernels, flat: Flat, lines: Lines, table: ShapeTable): Float64Array {
  const basis = noFunctions(table);
  let state: ShapeState = { coefficients: new Float64Array(0), background: new Float64Array(nBackground) };
  for (let round = 0; round < backgroundRounds; round++) {
    const normal = new ShapeNormal(kernels, basis, flat.ny, lines.nFibre);
    for (const x of fittingColumns(flat.nx, backgroundColumns, round)) {
      normal.add(lines, table, state.background, flatColumn(flat, x), true);
    }
    state = normal.solve(state, table);
  }
  return state.background;
}

/** Nothing about the form is to be fitted. */
function noFunctions({ start, step, n, referenceWidth }: ShapeTable): ShapeBasis {
  const none = new Float64Array(0);
  const begun = Int32Array.from({ length: 2 * (n - 1) }, (_, i) => (i % 2 === 0 ? 0 : -1));
  const shared = { start, step, n, referenceWidth, begun };
  return { ...shared, nSpline: 0, values: none, whole: none, priorShare: none, priorSpread: none, canMove: false };
}
