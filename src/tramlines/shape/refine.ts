/** The shape refined on the science frame itself: focus and scattering are never quite what they were in the flat. The frame's
 * own columns are added to what the flat said, centres held, cosmic rays left out. */
import type { Frame } from "../../detector/frame.js";
import type { Kernels } from "../../kernels/module.js";
import { MaskBit } from "../../reference/bits.js";
import type { SmoothBackground } from "../../reference/extract.js";
import { nShapeTerm, type ShapeTable } from "../../reference/shape.js";
import type { KnownShape } from "../tramlines.js";
import { type ShapeBasis, shapeBasis, tabulate } from "./basis.js";
import { type ColumnData, emptyColumn, type Lines } from "./column.js";
import { hermiteBasis, nHermiteFunction } from "./hermiteBasis.js";
import { nBackground, nBackgroundY, ShapeNormal, type ShapeState } from "./step.js";

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
    const normal = new ShapeNormal(kernels, basis, frame.ny, lines.nFibre);
    for (let i = 0; i < columns; i++) {
      const x = Math.floor(((i + 0.3 + 0.4 * round) * frame.nx) / columns);
      normal.add(lines, refined, state.background, frameColumn(frame, rejected, x), true, clip);
    }
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

/** One column of a frame, with what makes its variances. */
export function frameColumn(frame: Frame, rejected: Uint8Array | null, x: number): ColumnData {
  const { nx, ny, noise } = frame;
  const data = emptyColumn(x, ny);
  for (let y = 0; y < ny; y++) {
    const at = y * nx + x;
    const hit = rejected !== null && (rejected[at] & (MaskBit.cosmic | MaskBit.grown)) !== 0;
    data.good[y] = frame.mask[at] === 0 && !hit ? 1 : 0;
    data.light[y] = data.good[y] ? frame.electrons[at] : 0;
    data.fixedVariance[y] = noise.fixedVarianceImage?.[at] ?? noise.fixedVariance[noise.bandOfRow[y] * nx + x];
    data.variancePerElectron[y] = noise.inverseResponse?.[at] ?? 1;
  }
  return data;
}

/** The same surface in the orders of the shape's background. */
export function widenBackground({ nX, nY, coefficients }: SmoothBackground): Float64Array {
  const wide = new Float64Array(nBackground);
  for (let i = 0; i < nX; i++) for (let j = 0; j < nY; j++) wide[i * nBackgroundY + j] = coefficients[i * nY + j];
  return wide;
}
