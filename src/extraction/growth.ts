/** Rejection grown by one pixel: what borders on a rejected pixel and is brighter than the lower threshold goes too.
 *
 * A pass of its own over the whole frame, in fixed order and from the first pass's marks alone, so that the outcome
 * depends neither on the order of columns nor on who extracted them. */
import { MaskBit } from "../reference/bits.js";

/** Marks grown pixels in `rejected` [ny × nx]; returns for each column whether any was added: [nx] 0 or 1. */
export function growRejected(rejected: Uint8Array, nx: number, ny: number): Uint8Array {
  const changed = new Uint8Array(nx);
  forEachMarked(rejected, (at) => {
    const bits = rejected[at];
    if ((bits & MaskBit.suspect) === 0 || (bits & MaskBit.cosmic) !== 0) return;
    const x = at % nx;
    if (!bordersOnRejected(rejected, nx, ny, x, (at - x) / nx)) return;
    rejected[at] |= MaskBit.grown;
    changed[x] = 1;
  });
  return changed;
}

/** How many pixels are rejected: hit, or grown onto. */
export function countRejected(rejected: Uint8Array): number {
  let n = 0;
  forEachMarked(rejected, (at) => {
    if (rejected[at] & (MaskBit.cosmic | MaskBit.grown)) n++;
  });
  return n;
}

/** Calls `visit` for every pixel with any mark, in order. Few have one, so that eight are looked at together. */
function forEachMarked(rejected: Uint8Array, visit: (at: number) => void): void {
  const { buffer, byteOffset, length } = rejected;
  const nPair = byteOffset % 4 === 0 ? length >> 3 : 0;
  const words = new Int32Array(buffer, nPair > 0 ? byteOffset : 0, 2 * nPair);
  for (let pair = 0; pair < nPair; pair++) {
    if ((words[2 * pair] | words[2 * pair + 1]) === 0) continue;
    for (let at = 8 * pair; at < 8 * pair + 8; at++) if (rejected[at] !== 0) visit(at);
  }
  for (let at = 8 * nPair; at < length; at++) if (rejected[at] !== 0) visit(at);
}

function bordersOnRejected(rejected: Uint8Array, nx: number, ny: number, x: number, y: number): boolean {
  for (let v = Math.max(y - 1, 0); v <= Math.min(y + 1, ny - 1); v++) {
    for (let u = Math.max(x - 1, 0); u <= Math.min(x + 1, nx - 1); u++) {
      if (rejected[v * nx + u] & MaskBit.cosmic) return true;
    }
  }
  return false;
}
