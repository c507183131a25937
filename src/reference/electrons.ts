/** Counts to electrons: one amplifier's pixels above their zero level, times its gain, with mask bits for what saturated or
 * has no value. */
import { MaskBit } from "./bits.js";

/** One amplifier's part of an image. */
export interface AmplifierCounts {
  /** ADU, in rows of `stride` pixels; the amplifier's first is number `from`. */
  data: Float32Array | Float64Array;
  stride: number;
  from: number;
  nx: number;
  ny: number;
  /** ADU, saturated from here on. */
  limit: number;
  /** Where the electrons go, e⁻, NaN where there is no value, and their mask: rows of `outStride`, the first pixel `to`. */
  electrons: Float32Array;
  mask: Uint8Array;
  outStride: number;
  to: number;
}

export interface ZeroLevel {
  /** ADU: one for every row, or for every column when not `zeroForRow`. */
  zero: Float64Array;
  zeroForRow: boolean;
  /** e⁻/ADU. */
  gain: number;
  /** 0 ADU cannot be: such a pixel has no value. */
  zeroIsMissing: boolean;
}

export interface OddPixels {
  nSaturated: number;
  /** NaN or ±Infinity. */
  nWithoutValue: number;
  /** 0 where that is missing. */
  nZero: number;
}

/** Sets `electrons` and `mask`. */
export function electrons(part: AmplifierCounts, { zero, zeroForRow, gain, zeroIsMissing }: ZeroLevel): OddPixels {
  const { data, stride, from, nx, ny, limit, mask, outStride, to } = part;
  const odd = { nSaturated: 0, nWithoutValue: 0, nZero: 0 };
  for (let y = 0; y < ny; y++) {
    for (let x = 0; x < nx; x++) {
      const count = data[from + y * stride + x];
      const hasValue = Number.isFinite(count);
      const isZero = zeroIsMissing && count === 0;
      let bits = 0;
      if (count >= limit) bits |= MaskBit.saturated;
      if (!hasValue || isZero) bits |= MaskBit.missing;
      if (bits & MaskBit.saturated) odd.nSaturated++;
      if (!hasValue) odd.nWithoutValue++;
      if (isZero) odd.nZero++;
      const at = to + y * outStride + x;
      mask[at] = bits;
      part.electrons[at] = bits & MaskBit.missing ? Number.NaN : gain * (count - (zeroForRow ? zero[y] : zero[x]));
    }
  }
  return odd;
}

/** A column run of `bleed` or more saturated pixels has bled: `growBleed` pixels beyond its ends are half full, else
 * `growShort`. */
export interface Growth {
  bleed: number;
  growShort: number;
  growBleed: number;
}

/** Sets the mask's saturation bits beyond the ends of each run of saturated pixels along a column. */
export function growSaturation(part: AmplifierCounts, { bleed, growShort, growBleed }: Growth): void {
  const { data, stride, from, nx, ny, limit, mask, outStride, to } = part;
  for (let x = 0; x < nx; x++) {
    let run = 0;
    for (let y = 0; y <= ny; y++) {
      if (y < ny && data[from + y * stride + x] >= limit) {
        run++;
      } else if (run > 0) {
        const grow = run >= bleed ? growBleed : growShort;
        const end = Math.min(ny, y + grow);
        for (let k = Math.max(0, y - run - grow); k < end; k++) mask[to + k * outStride + x] |= MaskBit.saturated;
        run = 0;
      }
    }
  }
}

/** An image [ny × nx] turned about its diagonal, [nx × ny], into `out`. */
export function turn<T extends Float32Array | Uint8Array>(image: T, nx: number, ny: number, out: T): void {
  for (let y = 0; y < ny; y++) for (let x = 0; x < nx; x++) out[x * ny + y] = image[y * nx + x];
}
