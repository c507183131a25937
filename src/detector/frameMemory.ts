/** The kernel memory that a frame lies in:
 *
 *     electrons (4 bytes a pixel) │ mask (1) │ room for what works on the frame
 *
 * so that kernels take the pixels where they are. Pages that nobody touches cost nothing: the room is generous. */
import type { Kernels, Workbench } from "../kernels/module.js";

const FRAME_BYTES = 5;
/** A pixel, all in all: an extraction's images and spectra take less. */
const ROOM_BYTES = 44;
const LEAST_ROOM_BYTES = 64 * 2 ** 20;
/** WebAssembly addresses 4 GiB; the compiler's own tables lie there too. */
const MOST_BYTES = 2 ** 32 - 2 ** 20;

export interface FrameArrays {
  /** nPixel, not yet set. */
  electrons: Float32Array;
  mask: Uint8Array;
  /** Absent when they are arrays of their own. */
  memory?: Workbench;
}

/** Arrays for a frame of `nPixel` pixels, in a memory of their own where there are kernels and the engine gives it. */
export function frameArrays(kernels: Kernels | undefined, nPixel: number): FrameArrays {
  const memory = kernels && reserved(kernels, nPixel);
  if (memory === undefined) return { electrons: new Float32Array(nPixel), mask: new Uint8Array(nPixel) };
  return { electrons: memory.float32(nPixel), mask: memory.uint8(nPixel), memory };
}

function reserved(kernels: Kernels, nPixel: number): Workbench | undefined {
  const wanted = Math.min(MOST_BYTES, ROOM_BYTES * nPixel + LEAST_ROOM_BYTES);
  for (const nBytes of [wanted, FRAME_BYTES * nPixel]) {
    try {
      return kernels.workbench(nBytes);
    } catch (error) {
      if (!(error instanceof RangeError)) throw error;
    }
  }
  return undefined;
}
