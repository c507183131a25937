/** The kernel memory that a frame lies in:
 *
 *     electrons (4 bytes a pixel) │ mask (1) │ room for what works on the frame
 *
 * so that kernels take the pixels where they are. A raw frame read for it lies in that room until it is corrected. Pages that
 * nobody touches cost nothing: the room is generous. */
import type { Kernels, Workbench } from "./module.js";

const FRAME_BYTES = 5;
/** A pixel, all in all: an extraction's images and spectra take less. */
const ALL_BYTES = 44;
const LEAST_ROOM_BYTES = 64 * 2 ** 20;
/** WebAssembly addresses 4 GiB; the compiler's own tables lie there too. */
const MOST_BYTES = 2 ** 32 - 2 ** 20;

/** Bytes that electrons and mask of `nPixel` pixels take, each piece on a boundary of its own. */
export function frameBytes(nPixel: number): number {
  return FRAME_BYTES * nPixel + 128;
}

/** A memory for a frame of `nPixel` pixels with room behind it, `leastBytes` at least.
 * @throws RangeError when not even that can be had. */
export function reserveFrameRoom(kernels: Kernels, nPixel: number, leastBytes: number): Workbench {
  const wanted = Math.min(MOST_BYTES, ALL_BYTES * nPixel + LEAST_ROOM_BYTES);
  try {
    return kernels.workbench(Math.max(wanted, leastBytes));
  } catch (error) {
    if (!(error instanceof RangeError)) throw error;
    return kernels.workbench(leastBytes);
  }
}

/** `memory`, if `electrons` and `mask` lie in it and `nBytes` behind them are nobody's: those are lent then, as they are, until
 * they are given back. */
export function borrowRoom(
  kernels: Kernels,
  { electrons, mask }: { electrons: Float32Array; mask: Uint8Array },
  memory: Workbench | undefined,
  nBytes: number,
): Workbench | undefined {
  if (memory === undefined || memory.nThread !== kernels.nThread) return undefined;
  const { buffer } = memory.memory;
  if (electrons.buffer !== buffer || mask.buffer !== buffer || mask.byteOffset < electrons.byteOffset) return undefined;
  if (buffer.byteLength - (mask.byteOffset + mask.byteLength) <= nBytes + 64) return undefined;
  return memory.lend(mask) ? memory : undefined;
}
