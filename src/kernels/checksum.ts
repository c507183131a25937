/** The door to assembly/checksum.ts. */
import type { Workbench } from "./module.js";

/** The sum of the big-endian 32-bit words of `bytes`, which lie in the memory of `bench`, padded with zeros to whole words.
 * @throws RangeError when they lie elsewhere. */
export function checksum(bench: Workbench, bytes: Uint8Array): number {
  requireWithin(bench, bytes);
  return bench.call.checksum(bytes.byteOffset, bytes.length) >>> 0;
}

/** Turns the numbers of 1, 2, 4 or 8 bytes (`width`) that fill `bytes` about, in place, from the kernels' order to big-endian;
 * `unsigned` ones of 2 or 4 bytes less 2ⁿ⁻¹.
 * @throws RangeError when they lie outside of the memory of `bench`. */
export function toBigEndian(bench: Workbench, bytes: Uint8Array, width: number, unsigned: boolean): void {
  requireWithin(bench, bytes);
  if (width > 1) bench.call.toBigEndian(bytes.byteOffset, bytes.length / width, width, unsigned ? 1 : 0);
}

function requireWithin(bench: Workbench, bytes: Uint8Array): void {
  if (bytes.buffer !== bench.memory.buffer) throw new RangeError("The bytes lie outside of the kernels' memory.");
}
