/** Rejection grown by one pixel: what borders on a rejected pixel and is brighter than the lower threshold goes too.
 *
 * A pass of its own over the whole frame, in fixed order and from the first pass's marks alone, so that the outcome
 * depends neither on the order of columns nor on who extracted them. */
import { MaskBit } from "../reference/bits.js";

/** Marks grown pixels in `rejected` [ny × nx]; returns for each column whether any was added: [nx] 0 or 1. */
export function growRejected(rejected: Uint8Array, nx: number, ny: number): Uint8Array {
  const changed = new Uint8Array(nx);
  for (let y = 0; y < ny; y++) {
    for (let x = 0; x < nx; x++) {
      const bits = rejected[y * nx + x];
      if ((bits & MaskBit.suspect) === 0 || (bits & MaskBit.cosmic) !== 0) continue;
      if (!bordersOnRejected(rejected, nx, ny, x, y)) continue;
      rejected[y * nx + x] |= MaskBit.grown;
      changed[x] = 1;
    }
  }
  return changed;
}

function bordersOnRejected(rejected: Uint8Array, nx: number, ny: number, x: number, y: number): boolean {
  for (let v = Math.max(y - 1, 0); v <= Math.min(y + 1, ny - 1); v++) {
    for (let u = Math.max(x - 1, 0); u <= Math.min(x + 1, nx - 1); u++) {
      if (rejected[v * nx + u] & MaskBit.cosmic) return true;
    }
  }
  return false;
}
