/** Where a frame is put together: in kernel memory, by the kernels, where there are any and the counts fit Float32; else in
 * arrays of its own, by the reference. The numbers are the same to the bit. */
import * as byKernel from "../kernels/electrons.js";
import { frameBytes, reserveFrameRoom } from "../kernels/frameRoom.js";
import type { Kernels, Workbench } from "../kernels/module.js";
import type { AmplifierCounts, OddPixels, ZeroLevel } from "../reference/electrons.js";
import * as byReference from "../reference/electrons.js";
import type { RawImage } from "./raw.js";
import { GROWTH } from "./saturation.js";

export interface Picture {
  electrons: Float32Array;
  mask: Uint8Array;
}

export class Desk implements Picture {
  readonly electrons: Float32Array;
  readonly mask: Uint8Array;

  /** @param data ADU, as in the file; in the memory of `bench`, where there is one. */
  private constructor(
    readonly data: Float32Array | Float64Array,
    private readonly bench: Workbench | undefined,
    { electrons, mask }: Picture,
  ) {
    this.electrons = electrons;
    this.mask = mask;
  }

  /** For a frame of `nPixel` pixels, not yet set, made of `raw`. */
  static for({ data, memory, room }: RawImage, nPixel: number, kernels: Kernels | undefined): Desk {
    if (kernels === undefined || !(data instanceof Float32Array)) {
      return new Desk(data, undefined, { electrons: new Float32Array(nPixel), mask: new Uint8Array(nPixel) });
    }
    if (memory !== undefined && room !== undefined && frameBytes(nPixel) <= room.length) {
      const electrons = new Float32Array(memory.memory.buffer, room.byteOffset, nPixel);
      // On a boundary of its own, as a piece of its own would be.
      const behind = Math.ceil((room.byteOffset + electrons.byteLength) / 64) * 64;
      return new Desk(data, memory, { electrons, mask: new Uint8Array(memory.memory.buffer, behind, nPixel) });
    }
    const bench = reserveFrameRoom(kernels, nPixel, 2 * frameBytes(nPixel) + data.byteLength + 65536);
    const picture = { electrons: bench.float32(nPixel), mask: bench.uint8(nPixel) };
    const copy = bench.float32(data.length);
    copy.set(data);
    return new Desk(copy, bench, picture);
  }

  /** A second picture of that size, for a while. */
  another(): Picture {
    const n = this.mask.length;
    if (this.bench) return { electrons: this.bench.float32(n), mask: this.bench.uint8(n) };
    return { electrons: new Float32Array(n), mask: new Uint8Array(n) };
  }

  toElectrons(part: AmplifierCounts, level: ZeroLevel): OddPixels {
    return this.bench ? byKernel.electrons(this.bench, part, level) : byReference.electrons(part, level);
  }

  growSaturation(part: AmplifierCounts): void {
    if (this.bench) byKernel.growSaturation(this.bench, part, GROWTH);
    else byReference.growSaturation(part, GROWTH);
  }

  /** Sets the frame's picture to `picture` [ny × nx] turned about its diagonal. */
  turn({ electrons, mask }: Picture, nx: number, ny: number): void {
    if (this.bench) {
      byKernel.turn(this.bench, electrons, nx, ny, this.electrons);
      byKernel.turn(this.bench, mask, nx, ny, this.mask);
    } else {
      byReference.turn(electrons, nx, ny, this.electrons);
      byReference.turn(mask, nx, ny, this.mask);
    }
  }

  /** The frame's memory, handing out anew all that is behind the frame; undefined when it has arrays of its own. */
  close(): Workbench | undefined {
    this.bench?.keepUpTo(this.mask);
    return this.bench;
  }
}
