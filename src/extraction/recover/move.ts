/** A flat's light moved along y to where the science frame's light sits.
 *
 * Interpolating the pixels themselves would blur lines of 2.4 px FWHM by about a per cent of their peak. So only what the profiles
 * do not explain is interpolated (six points, Lagrange), and their own light is drawn at the new place exactly:
 *
 *     moved = drawn(y + δ) + interpolated(flat − drawn(y))
 *
 * A profile that is wrong stays wrong by the same amount, save for the interpolation's error in the *difference*, at most
 * a few per cent of it. Without a shift the pixels stay as they are, to the last bit. */

import type { Frame } from "../../detector/frame.js";
import { legendreArgument } from "../../reference/legendre.js";
import type { Flat } from "../../tramlines/flat.js";
import type { Tramlines } from "../../tramlines/tramlines.js";
import { type Extraction, type ExtractionOptions, extractFrame } from "../extract.js";
import type { ExtractionPlan } from "../plan.js";
import { columnOf, type FlatLight } from "./flatLight.js";
import type { MovedLight } from "./inject.js";
import { ProfileLight } from "./light.js";

/** px: a movement smaller than this everywhere is none. */
const leastMovement = 0.002;

/** Plane δ = c₀ + c₁·x + c₂·y, x, y ∈ [−1, 1] over the frame, px; where a frame's light sits against the tramlines. */
type Plane = [number, number, number];

export interface Movement {
  /** From the tramlines to the flat's light, and on from there to the frame's. */
  toFlat: Plane;
  onwards: Plane;
  /** px: the largest movement from flat to frame; 0 for none. */
  largest: number;
}

/** How the flat's light must move, by the shifts that the extraction measures of both. */
export async function movementOf(
  flat: Flat,
  tramlines: Tramlines,
  extraction: Extraction,
  options: ExtractionOptions,
): Promise<Movement> {
  const toFrame = planeOf(extraction);
  const whole: Frame = { ...flat.frame, name: flat.name, electrons: flat.electrons, mask: flat.mask };
  const toFlat = planeOf(await extractFrame(whole, tramlines, options));
  const onwards = toFrame.map((c, i) => c - toFlat[i]) as Plane;
  const largest = onwards.reduce((sum, c) => sum + Math.abs(c), 0);
  if (largest >= leastMovement) return { toFlat, onwards, largest };
  return { toFlat, onwards: [0, 0, 0], largest: 0 };
}

function planeOf(extraction: Extraction): Plane {
  const { shift } = extraction as { shift?: { coefficients: Plane } | null };
  return shift?.coefficients ?? [0, 0, 0];
}

/** The flat's pixels where the frame's light sits. `nUsed`: flats in the mean of each pixel. */
export function moveToFrame(
  light: FlatLight,
  nUsed: Uint8Array,
  { toFlat, onwards, largest }: Movement,
  tramlines: Tramlines,
  plan: ExtractionPlan,
): MovedLight {
  const { pixels: still, known, level } = light;
  if (largest === 0) return { pixels: still, noiseLeft: null, nUsed, level };
  const { nx, ny } = tramlines;
  const here = new ProfileLight(movedTramlines(tramlines, toFlat), plan);
  const there = new ProfileLight(movedTramlines(tramlines, toFlat.map((c, i) => c + onwards[i]) as Plane), plan);
  const pixels = new Float32Array(nx * ny);
  const noiseLeft = new Float32Array(nx * ny);
  const squares = new Float64Array(ny);
  for (let x = 0; x < nx; x++) {
    const drawn = here.column(x, known, nx);
    const unexplained = columnOf(still, nx, ny, x).map((electrons, y) => electrons - drawn[y]);
    const tx = legendreArgument(x, nx);
    const shift = (y: number) => onwards[0] + onwards[1] * tx + onwards[2] * legendreArgument(y, ny);
    const left = moveColumn(unexplained, shift, squares);
    const anew = there.column(x, known, nx);
    for (let y = 0; y < ny; y++) {
      pixels[y * nx + x] = anew[y] + left[y];
      noiseLeft[y * nx + x] = squares[y];
    }
  }
  return { pixels, noiseLeft, nUsed, level };
}

/** The tramlines with y + δ(x, y) for y. */
function movedTramlines(tramlines: Tramlines, [c0, c1, c2]: Plane): Tramlines {
  const legendre = tramlines.legendre.slice();
  const nCoef = tramlines.degree + 1;
  for (let at = 0; at < legendre.length; at += nCoef) {
    // y ∈ [0, ny − 1] on [−1, 1]: δ is linear in y, so every coefficient of y(x) changes alike.
    for (let j = 0; j < nCoef; j++) legendre[at + j] *= 1 + (2 * c2) / (tramlines.ny - 1);
    legendre[at] += c0 - c2;
    if (nCoef > 1) legendre[at + 1] += c1;
  }
  return { ...tramlines, legendre };
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
