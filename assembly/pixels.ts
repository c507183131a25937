// FITS pixels to numbers: big-endian integers or floats → f32 or f64 with zero, scale and blank (FITS Standard 4.0,
// sections 4.4.2.5 and 5). value = zero + scale · stored; a stored integer that equals `blank` has no value: NaN.
//
// In place: the stored pixels may lie at the end of the room for the results,
//
//     outPtr ┌──────────── results, w bytes a pixel ────────────┐
//            └─────── free ───────┬── stored, s ≤ w bytes each ──┘
//
// since result i ends at w·(i+1) ≤ (w−s)·n + s·(i+1), where the first pixel that is not yet read starts. The vector loop
// for 16 bits keeps to it too: 32 bytes written at 4i never reach past the 16 read at 2n + 2i while i ≤ n − 8.
// The reference twin is src/reference/pixels.ts.
import { swapWords } from "./checksum";

/** Exact in f32: bitpix 8 and 16 with a whole zero (|zero| ≤ 2²³), −32 with zero = 0. */
export function pixelsToFloat32(
  bitpix: i32,
  inPtr: usize,
  outPtr: usize,
  n: usize,
  zero: f32,
  hasBlank: bool,
  blank: i64,
): void {
  if (bitpix == 16) int16ToFloat32(inPtr, outPtr, n, zero, hasBlank, blank);
  else if (bitpix == 8) uint8ToFloat32(inPtr, outPtr, n, zero, hasBlank, blank);
  else swapFloat32(inPtr, outPtr, n);
}

function int16ToFloat32(inPtr: usize, outPtr: usize, n: usize, zero: f32, hasBlank: bool, blank: i64): void {
  const vectorEnd: usize = n & ~7;
  const zeros = f32x4.splat(zero);
  const nans = f32x4.splat(f32.NaN);
  const inRange = hasBlank && blank == <i64>(<i16>blank);
  const blanks = i16x8.splat(<i16>blank);
  const use = i16x8.splat(inRange ? -1 : 0);
  for (let i: usize = 0; i < vectorEnd; i += 8) {
    const raw = v128.load(inPtr + (i << 1));
    const pixels = i8x16.shuffle(raw, raw, 1, 0, 3, 2, 5, 4, 7, 6, 9, 8, 11, 10, 13, 12, 15, 14);
    const isBlank = v128.and(i16x8.eq(pixels, blanks), use);
    const low = f32x4.add(f32x4.convert_i32x4_s(i32x4.extend_low_i16x8_s(pixels)), zeros);
    const high = f32x4.add(f32x4.convert_i32x4_s(i32x4.extend_high_i16x8_s(pixels)), zeros);
    v128.store(outPtr + (i << 2), v128.bitselect(nans, low, i32x4.extend_low_i16x8_s(isBlank)));
    v128.store(outPtr + (i << 2) + 16, v128.bitselect(nans, high, i32x4.extend_high_i16x8_s(isBlank)));
  }
  for (let i: usize = vectorEnd; i < n; i++) {
    const stored = bswap<i16>(load<i16>(inPtr + (i << 1)));
    store<f32>(outPtr + (i << 2), hasBlank && <i64>stored == blank ? f32.NaN : <f32>stored + zero);
  }
}

function uint8ToFloat32(inPtr: usize, outPtr: usize, n: usize, zero: f32, hasBlank: bool, blank: i64): void {
  for (let i: usize = 0; i < n; i++) {
    const stored = load<u8>(inPtr + i);
    store<f32>(outPtr + (i << 2), hasBlank && <i64>stored == blank ? f32.NaN : <f32>stored + zero);
  }
}

function swapFloat32(inPtr: usize, outPtr: usize, n: usize): void {
  const vectorEnd: usize = n & ~3;
  for (let i: usize = 0; i < vectorEnd; i += 4) {
    v128.store(outPtr + (i << 2), swapWords(v128.load(inPtr + (i << 2))));
  }
  for (let i = vectorEnd; i < n; i++) store<u32>(outPtr + (i << 2), bswap<u32>(load<u32>(inPtr + (i << 2))));
}

/** Every kind of pixel to f64. 64-bit integers are rounded to the nearest double once, after an unsigned zero of 2⁶³
 * has been added exactly. */
export function pixelsToFloat64(
  bitpix: i32,
  inPtr: usize,
  outPtr: usize,
  n: usize,
  scale: f64,
  zero: f64,
  hasBlank: bool,
  blank: i64,
): void {
  if (bitpix < 0) {
    floatsToFloat64(bitpix, inPtr, outPtr, n, scale, zero);
    return;
  }
  const unsigned64 = bitpix == 64 && scale == 1.0 && zero == 4294967296.0 * 2147483648.0;
  const width = <usize>(bitpix >> 3);
  for (let i: usize = 0; i < n; i++) {
    const stored = storedInteger(bitpix, inPtr + i * width);
    let value: f64 = unsigned64 ? <f64>(<u64>stored ^ 0x8000000000000000) : zero + scale * <f64>stored;
    if (hasBlank && stored == blank) value = f64.NaN;
    store<f64>(outPtr + (i << 3), value);
  }
}

function storedInteger(bitpix: i32, ptr: usize): i64 {
  if (bitpix == 8) return <i64>load<u8>(ptr);
  if (bitpix == 16) return <i64>bswap<i16>(load<i16>(ptr));
  if (bitpix == 32) return <i64>bswap<i32>(load<i32>(ptr));
  return bswap<i64>(load<i64>(ptr));
}

function floatsToFloat64(bitpix: i32, inPtr: usize, outPtr: usize, n: usize, scale: f64, zero: f64): void {
  // Adding a zero of 0 would turn −0 into 0.
  const plain = scale == 1.0 && zero == 0.0;
  for (let i: usize = 0; i < n; i++) {
    const stored: f64 =
      bitpix == -32
        ? <f64>reinterpret<f32>(bswap<u32>(load<u32>(inPtr + (i << 2))))
        : reinterpret<f64>(bswap<u64>(load<u64>(inPtr + (i << 3))));
    store<f64>(outPtr + (i << 3), plain ? stored : zero + scale * stored);
  }
}
