/** The door to assembly/pixels.ts: stored pixels are read straight into the end of the room for the results and decoded
 * in place, so that a frame is copied once, from the disk. */
import type { PixelScaling } from "../reference/pixels.js";
import type { Workbench } from "./module.js";

/** True when Float32 holds every value exactly: 8 and 16 bits with unit scale and a whole zero, −32 without scaling. */
export function fitsFloat32({ bitpix, scale, zero }: PixelScaling): boolean {
  if (scale !== 1) return false;
  if (bitpix === -32) return zero === 0;
  return (bitpix === 8 || bitpix === 16) && Number.isInteger(zero) && Math.abs(zero) <= 2 ** 23;
}

/** Bytes of memory in which `n` pixels are decoded.
 * @throws RangeError when n or bitpix is impossible. */
export function decodingBytes(n: number, scaling: PixelScaling): number {
  const { bitpix } = scaling;
  if (!Number.isSafeInteger(n) || n < 0) throw new RangeError(`${n} pixels asked for; give a whole number from 0.`);
  if (![8, 16, 32, 64, -32, -64].includes(bitpix))
    throw new RangeError(`bitpix is ${bitpix}; give 8, 16, 32, 64, -32 or -64.`);
  return storedAt(n, scaling) + (n * Math.abs(bitpix)) / 8;
}

/** The stored pixels lie at the end of the room, on a whole word, so that they can be summed there. */
function storedAt(n: number, scaling: PixelScaling): number {
  const resultBytes = n * (fitsFloat32(scaling) ? 4 : 8);
  return Math.ceil((resultBytes - (n * Math.abs(scaling.bitpix)) / 8) / 4) * 4;
}

/** Values of `n` pixels that `fill` puts, as they are stored, into the bytes it is given: a piece of `bench`, which has room
 * for `decodingBytes`. Float32 where that is exact (see `fitsFloat32`), otherwise Float64; NaN where there is no value.
 * @throws RangeError when n or bitpix is impossible, or there is no room. */
export function decodePixels(
  bench: Workbench,
  n: number,
  scaling: PixelScaling,
  fill: (stored: Uint8Array) => void,
): Float32Array | Float64Array {
  const { bitpix, scale, zero, blank } = scaling;
  const room = bench.uint8(decodingBytes(n, scaling));
  const stored = room.subarray(storedAt(n, scaling));
  fill(stored);
  const hasBlank = blank !== undefined && bitpix > 0 ? 1 : 0;
  const blankValue = hasBlank ? BigInt.asIntN(64, BigInt(blank!)) : 0n;
  if (fitsFloat32(scaling)) {
    bench.call.pixelsToFloat32(bitpix, stored.byteOffset, room.byteOffset, n, zero, hasBlank, blankValue);
    return new Float32Array(room.buffer, room.byteOffset, n);
  }
  bench.call.pixelsToFloat64(bitpix, stored.byteOffset, room.byteOffset, n, scale, zero, hasBlank, blankValue);
  return new Float64Array(room.buffer, room.byteOffset, n);
}
