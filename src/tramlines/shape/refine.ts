/** The shape refined on the science frame itself: focus and scattering are never quite what they were in the flat. The frame's
 * own columns are added to what the flat said, centres held, cosmic rays left out. */
import type { Frame } from "../../detector/frame.js";
import type { Kernels } from "../../kernels/module.js";
import { MaskBit } from "../../reference/bits.js";
import type { SmoothBackground } from "../../reference/extract.js";
import { nShapeTerm, type ShapeTable } from "../../reference/shape.js";
import { nBackground, nBackgroundX, nBackgroundY } from "../../reference/shapeBackground.js";
import type { ShapeBasis } from "../../reference/shapeBasis.js";
import { type ColumnData, emptyColumn } from "../../reference/shapeColumn.js";
import type { Lines } from "../../reference/shapeProfiles.js";
import type { KnownShape } from "../tramlines.js";
import { shapeBasis, tabulate } from "./basis.js";
import { hermiteBasis, nHermiteFunction } from "./hermiteBasis.js";
import { ShapeNormal, type ShapeState } from "./normal.js";

const steps = 2;
const columns = 96;
const clip = 6;

/** Refines `table` on `frame`. `rejected`: ny × nx bits of MaskBit; `lines`: moved to where the frame's light sits. */
export function refineShape(
  kernels: Kernels,
  known: KnownShape,
  table: ShapeTable,
  lines: Lines,
  frame: Frame,
  background: SmoothBackground,
  rejected: Uint8Array,
): ShapeTable {
  const basis = basisOf(kernels, known, table.referenceWidth);
  let state: ShapeState = { coefficients: known.best, background: widenBackground(background) };
  let refined = table;
  for (let round = 0; round < steps; round++) {
    const normal = new ShapeNormal(kernels, basis);
    const which = Array.from({ length: columns }, (_, i) => Math.floor(((i + 0.3 + 0.4 * round) * frame.nx) / columns));
    normal.add(lines, refined, state.background, frameColumns(frame, rejected, which), true, clip);
    state = normal.solve(state, refined, known);
    refined = { ...tabulate(basis, state.coefficients), centroid: table.centroid };
  }
  return refined;
}

/** What the flat's shape was made of: its coefficients' number tells. */
function basisOf(kernels: Kernels, { best }: KnownShape, referenceWidth: number): ShapeBasis {
  const gaussHermite = best.length === nHermiteFunction * nShapeTerm;
  return gaussHermite ? hermiteBasis(kernels, referenceWidth) : shapeBasis(referenceWidth);
}

/** Columns of a frame, with what makes their variances. `rejected`: ny × nx bits of MaskBit, or none. */
export function frameColumns(frame: Frame, rejected: Uint8Array | null, which: number[]): ColumnData[] {
  const { nx, ny, noise } = frame;
  const columns = which.map((x) => emptyColumn(x, ny));
  for (let y = 0; y < ny; y++) {
    const band = noise.bandOfRow[y] * nx;
    for (const column of columns) {
      const at = y * nx + column.x;
      const hit = rejected !== null && (rejected[at] & (MaskBit.cosmic | MaskBit.grown)) !== 0;
      const good = frame.mask[at] === 0 && !hit;
      column.good[y] = good ? 1 : 0;
      column.light[y] = good ? frame.electrons[at] : 0;
      column.fixedVariance[y] = noise.fixedVarianceImage?.[at] ?? noise.fixedVariance[band + column.x];
      column.variancePerElectron[y] = noise.inverseResponse?.[at] ?? 1;
    }
  }
  return columns;
}

export function frameColumn(frame: Frame, rejected: Uint8Array | null, x: number): ColumnData {
  return frameColumns(frame, rejected, [x])[0];
}

/** The same surface in the orders of the shape's background; higher ones are cut off. */
export function widenBackground({ nX, nY, coefficients }: SmoothBackground): Float64Array {
  const wide = new Float64Array(nBackground);
  for (let i = 0; i < Math.min(nX, nBackgroundX); i++) {
    for (let j = 0; j < Math.min(nY, nBackgroundY); j++) wide[i * nBackgroundY + j] = coefficients[i * nY + j];
  }
  return wide;
}
