/** FITS pixels to numbers (FITS Standard 4.0, sections 4.4.2.5 and 5): value = zero + scale · stored, big-endian; a
 * stored integer that equals `blank` has no value. */

export interface PixelScaling {
  /** 8 (unsigned), 16, 32, 64 (signed), −32, −64 (floating point). */
  bitpix: number;
  /** BSCALE. */
  scale: number;
  /** BZERO. */
  zero: number;
  /** BLANK, of integers only. */
  blank?: number | bigint | undefined;
}

/** `stored`: n pixels. Returns n values; NaN where there is none. Relative error ≤ 2⁻⁵² (one product, one sum). */
export function decodePixels(stored: Uint8Array, n: number, scaling: PixelScaling): Float64Array {
  const view = new DataView(stored.buffer, stored.byteOffset, stored.byteLength);
  const values = new Float64Array(n);
  for (let i = 0; i < n; i++) {
    values[i] = scaling.bitpix > 0 ? integerValue(view, i, scaling) : floatValue(view, i, scaling);
  }
  return values;
}

function integerValue(view: DataView, i: number, { bitpix, scale, zero, blank }: PixelScaling): number {
  const stored = storedInteger(view, i, bitpix);
  if (blank !== undefined && stored === BigInt(blank)) return Number.NaN;
  const unsigned64 = bitpix === 64 && scale === 1 && zero === 2 ** 63;
  return unsigned64 ? Number(stored + 2n ** 63n) : zero + scale * Number(stored);
}

function storedInteger(view: DataView, i: number, bitpix: number): bigint {
  if (bitpix === 8) return BigInt(view.getUint8(i));
  if (bitpix === 16) return BigInt(view.getInt16(2 * i));
  if (bitpix === 32) return BigInt(view.getInt32(4 * i));
  return view.getBigInt64(8 * i);
}

function floatValue(view: DataView, i: number, { bitpix, scale, zero }: PixelScaling): number {
  const stored = bitpix === -32 ? view.getFloat32(4 * i) : view.getFloat64(8 * i);
  // Adding a zero of 0 would turn −0 into 0.
  return scale === 1 && zero === 0 ? stored : zero + scale * stored;
}
