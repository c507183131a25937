/** Pixels to FITS bytes through one small buffer that stays in cache, by the kernels where they are given, else by their
 * reference. */
import * as byKernel from "../kernels/checksum.js";
import type { Kernels, Workbench } from "../kernels/module.js";
import * as byReference from "../reference/checksum.js";
import { BLOCK_BYTES } from "./cards.js";

/** Uint16Array and Uint32Array are written as signed numbers with BZERO. */
export type PixelArray = Uint8Array | Int16Array | Uint16Array | Int32Array | Uint32Array | Float32Array | Float64Array;

/** A whole number of blocks, so that only the last piece is padded. */
const PIECE_BYTES = 90 * BLOCK_BYTES;

export class Encoder {
  private readonly bench: Workbench | undefined;
  private readonly room: Uint8Array;

  constructor(kernels?: Kernels) {
    this.bench = kernels?.workbench(PIECE_BYTES);
    this.room = this.bench?.uint8(PIECE_BYTES) ?? new Uint8Array(PIECE_BYTES);
  }

  /** The pixels as they are stored, with the padding behind them, piece by piece: each is gone when the next is asked for. */
  *pixels(data: PixelArray): Generator<Uint8Array> {
    const bytes = new Uint8Array(data.buffer, data.byteOffset, data.byteLength);
    const unsigned = data instanceof Uint16Array || data instanceof Uint32Array;
    for (let at = 0; at < bytes.length; at += PIECE_BYTES) {
      const part = bytes.subarray(at, at + PIECE_BYTES);
      this.room.set(part);
      const own = this.room.subarray(0, part.length);
      if (this.bench) byKernel.toBigEndian(this.bench, own, data.BYTES_PER_ELEMENT, unsigned);
      else byReference.toBigEndian(own, data.BYTES_PER_ELEMENT, unsigned);
      const padded = Math.ceil(part.length / BLOCK_BYTES) * BLOCK_BYTES;
      yield this.room.subarray(0, padded).fill(0, part.length);
    }
  }

  /** The checksum of one of its own pieces, or of other bytes. */
  sum(piece: Uint8Array): number {
    return this.bench && piece.buffer === this.room.buffer
      ? byKernel.checksum(this.bench, piece)
      : byReference.checksum(piece);
  }
}
