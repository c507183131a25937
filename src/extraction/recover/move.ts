/** A flat's light moved along y to where the science frame's light sits.
 *
 * Interpolating the pixels themselves errs by 0.5 % of the peak (root mean square, lines of 2.4 px FWHM, a third of a pixel). So only
 * what the profiles do not explain is interpolated (six points, Lagrange), and their own light is drawn at the new place exactly:
 *
 *     moved = drawn(y + δ) + interpolated(flat − drawn(y))
 *
 * A profile that is wrong stays wrong by as much, save for that part of the difference which changes within a pixel. That leaves
 * 0.1 % of the peak with profiles measured on a flat and 0.2 % with Gaussians that do not fit (measured on simulated flats with and
 * without the shift). Without a shift the pixels stay as they are, to the last bit. */

import type { Frame } from "../../detector/frame.js";
import type { Kernels } from "../../kernels/module.js";
import type { Flat } from "../../tramlines/flat.js";
import { type Shift, shiftAt, shiftTramlines } from "../../tramlines/shift.js";
import type { Tramlines } from "../../tramlines/tramlines.js";
import { adaptTramlines } from "../adapt.js";
import type { ExtractionPlan } from "../plan.js";
import { columnOf, type FlatLight } from "./flatLight.js";
import type { MovedLight } from "./inject.js";
import { ProfileLight } from "./light.js";

/** px: what moves less than this everywhere is left where it is, so that placing it is put to the test too. */
const leastMovement = 0.02;

export interface Movement {
  /** From the flat's light to the frame's. */
  shift: Shift;
  /** px: the largest anywhere. */
  largest: number;
}

/** How the flat's light must move, by the shifts that the extraction measures of both; null for not at all. */
export function movementOf(kernels: Kernels, flat: Flat, tramlines: Tramlines, toFrame: Shift | null): Movement | null {
  if (toFrame === null) return null;
  const whole: Frame = { ...flat.frame, name: flat.name, electrons: flat.electrons, mask: flat.mask };
  const toFlat = adaptTramlines(kernels, whole, tramlines, { refine: false }).shift;
  const [c0, c1, c2] = toFrame.coefficients.map((c, i) => c - (toFlat?.coefficients[i] ?? 0));
  const largest = Math.abs(c0) + Math.abs(c1) + Math.abs(c2);
  return largest < leastMovement ? null : { shift: { ...toFrame, coefficients: [c0, c1, c2] }, largest };
}

/** Where the flat's light runs, given where the frame's does: the movement backwards, but for its square. */
export function flatLines(frameLines: Tramlines, movement: Movement | null): Tramlines {
  if (movement === null) return frameLines;
  const [c0, c1, c2] = movement.shift.coefficients;
  return shiftTramlines(frameLines, { ...movement.shift, coefficients: [-c0, -c1, -c2] });
}

/** The flat's pixels where the frame's light sits. `nUsed`: flats in the mean of each pixel. */
export function moveToFrame(
  light: FlatLight,
  nUsed: Uint8Array,
  movement: Movement | null,
  frameLines: Tramlines,
  plan: ExtractionPlan,
): MovedLight {
  const { pixels: still, known, level } = light;
  if (movement === null) return { pixels: still, noiseLeft: null, nUsed, level };
  const { nx, ny } = frameLines;
  const here = new ProfileLight(flatLines(frameLines, movement), plan);
  const there = new ProfileLight(frameLines, plan);
  const pixels = new Float32Array(nx * ny);
  const noiseLeft = new Float32Array(nx * ny);
  const squares = new Float64Array(ny);
  for (let x = 0; x < nx; x++) {
    const drawn = here.column(x, known, nx);
    const unexplained = columnOf(still, nx, ny, x).map((electrons, y) => electrons - drawn[y]);
    const left = moveColumn(unexplained, (y) => shiftAt(movement.shift, x, y, nx, ny), squares);
    const anew = there.column(x, known, nx);
    for (let y = 0; y < ny; y++) {
      pixels[y * nx + x] = anew[y] + left[y];
      noiseLeft[y * nx + x] = squares[y];
    }
  }
  return { pixels, noiseLeft, nUsed, level };
}

/** Lagrange's weights for the value at `share` ∈ [0, 1) between the third and the fourth of six points. */
export function sixPointShares(share: number): Float64Array {
  return Float64Array.from({ length: 6 }, (_, i) => {
    let weight = 1;
    for (let j = 0; j < 6; j++) if (j !== i) weight *= (share + 2 - j) / (i - j);
    return weight;
  });
}

/** `column` [ny] moved up by shift(y) px; beyond the frame it goes on as at its edge. `squares` receives Σ weight² of each
 * pixel: what is left of independent noise of unit variance. */
export function moveColumn(column: Float64Array, shift: (y: number) => number, squares: Float64Array): Float64Array {
  const last = column.length - 1;
  return column.map((_, y) => {
    const from = y - shift(y);
    const cell = Math.floor(from);
    const shares = sixPointShares(from - cell);
    let sum = 0;
    squares[y] = 0;
    for (let i = 0; i < 6; i++) {
      sum += shares[i] * column[Math.min(Math.max(cell - 2 + i, 0), last)];
      squares[y] += shares[i] * shares[i];
    }
    return sum;
  });
}
