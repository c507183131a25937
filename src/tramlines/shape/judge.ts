/** How well a profile model tells what it has not seen: columns of the flat that no model was fitted to. There only the
 * fibres' fluxes are fitted; form, lines, widths and the background stay as other columns made them. */

import type { Kernels } from "../../kernels/module.js";
import { fitShapeColumns } from "../../kernels/shapeColumn.js";
import type { ShapeTable } from "../../reference/shape.js";
import { backgroundColumn, nBackground } from "../../reference/shapeBackground.js";
import type { ShapeBasis } from "../../reference/shapeBasis.js";
import type { Lines } from "../../reference/shapeProfiles.js";
import type { Flat } from "../flat.js";
import { fittingColumns, judgingColumns } from "./columns.js";
import { flatColumns } from "./measure.js";
import { ShapeNormal, type ShapeState } from "./normal.js";

/** A pixel's squared residual counts up to this many variances: a cosmic ray must not judge. */
const mostSquare = 36;
const backgroundColumns = 40;
const backgroundRounds = 2;

/** What one held-out column shows of a model. */
export interface Judged {
  /** Index of its group. */
  group: number;
  /** e⁻: [ny]. */
  residual: Float64Array;
  /** e⁻⁻², 0 for a bad pixel. */
  inverseVariance: Float64Array;
  /** e⁻, the fibres alone. */
  model: Float64Array;
}

/** The held-out columns. `background`: as ShapeState has it. */
export function judgeColumns(
  kernels: Kernels,
  flat: Flat,
  lines: Lines,
  table: ShapeTable,
  background: Float64Array,
): Judged[] {
  const groups = judgingColumns(flat.nx);
  const columns = flatColumns(flat, groups.flat());
  const groupOf = groups.flatMap((group, i) => group.map(() => i));
  return fitShapeColumns(kernels, { lines, table, background, columns, nPar: 1 }).map(
    ({ model, inverseVariance, x }, i) => {
      const under = backgroundColumn(background, x, lines);
      const residual = columns[i].light.map((light, y) => light - under[y] - model[y]);
      return { group: groupOf[i], residual, inverseVariance, model };
    },
  );
}

/** For each group, squares of its rows' mean residuals over their variances, per degree of freedom: 1 for the true
 * profile. NaN for a group without a good pixel. */
export function heldOutMisfits(judged: Judged[], nFibre: number): Float64Array {
  const nGroup = 1 + judged.reduce((most, { group }) => Math.max(most, group), -1);
  return Float64Array.from({ length: nGroup }, (_, g) =>
    groupMisfit(
      judged.filter(({ group }) => group === g),
      nFibre,
    ),
  );
}

function groupMisfit(columns: Judged[], nFibre: number): number {
  let [sum, freedom] = [0, -nFibre];
  for (let y = 0; y < columns[0].residual.length; y++) {
    let [weighted, weight] = [0, 0];
    for (const { residual, inverseVariance } of columns) {
      const square = residual[y] * residual[y] * inverseVariance[y];
      const tamed = square > mostSquare ? Math.sqrt(mostSquare / square) : 1;
      weighted += tamed * residual[y] * inverseVariance[y];
      weight += inverseVariance[y];
    }
    if (weight === 0) continue;
    sum += (weighted * weighted) / weight;
    freedom++;
  }
  return freedom > 0 ? sum / freedom : Number.NaN;
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
    const normal = new ShapeNormal(kernels, basis);
    const columns = flatColumns(flat, fittingColumns(flat.nx, backgroundColumns, round));
    normal.add(lines, table, state.background, columns, true);
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
