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
