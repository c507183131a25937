/** The door to assembly/pixels.ts: stored pixels are read straight into the end of the room for the results and decoded
 * in place, so that a frame is copied once, from the disk. */
import type { PixelScaling } from "../reference/pixels.js";
import type { Kernels } from "./module.js";

/** True when Float32 holds every value exactly: 8 and 16 bits with unit scale and a whole zero, −32 without scaling. */
export function fitsFloat32({ bitpix, scale, zero }: PixelScaling): boolean {
  if (scale !== 1) return false;
  if (bitpix === -32) return zero === 0;
  return (bitpix === 8 || bitpix === 16) && Number.isInteger(zero) && Math.abs(zero) <= 2 ** 23;
}

/** Values of `n` pixels that `fill` puts, as they are stored, into the bytes it is given.
 * Returns a view of a memory of its own: Float32 where that is exact (see `fitsFloat32`), otherwise Float64; NaN where
 * there is no value.
 * @throws RangeError when n or bitpix is impossible, or the memory cannot be had. */
export function decodePixels(
  kernels: Kernels,
  n: number,
  scaling: PixelScaling,
  fill: (stored: Uint8Array) => void,
): Float32Array | Float64Array {
  const { bitpix, scale, zero, blank } = scaling;
  if (!Number.isSafeInteger(n) || n < 0) throw new RangeError(`${n} pixels asked for; give a whole number from 0.`);
  if (![8, 16, 32, 64, -32, -64].includes(bitpix))
    throw new RangeError(`bitpix is ${bitpix}; give 8, 16, 32, 64, -32 or -64.`);
  const narrow = fitsFloat32(scaling);
  const storedBytes = (n * Math.abs(bitpix)) / 8;
  const resultBytes = n * (narrow ? 4 : 8);
  // The stored pixels lie at the end, on a whole word, so that they can be summed there.
  const at = Math.ceil((resultBytes - storedBytes) / 4) * 4;
  const bench = kernels.workbench(at + storedBytes, 1);
  const room = bench.uint8(at + storedBytes);
  fill(room.subarray(at));
  const inPtr = room.byteOffset + at;
  const hasBlank = blank !== undefined && bitpix > 0 ? 1 : 0;
  const blankValue = hasBlank ? BigInt.asIntN(64, BigInt(blank!)) : 0n;
  if (narrow) {
    bench.call.pixelsToFloat32(bitpix, inPtr, room.byteOffset, n, zero, hasBlank, blankValue);
    return new Float32Array(room.buffer, room.byteOffset, n);
  }
  bench.call.pixelsToFloat64(bitpix, inPtr, room.byteOffset, n, scale, zero, hasBlank, blankValue);
  return new Float64Array(room.buffer, room.byteOffset, n);
}
