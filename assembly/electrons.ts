// Counts to electrons: one amplifier's pixels above their zero level, times its gain, with mask bits for what saturated or has
// no value. The reference twin is src/reference/electrons.ts.
import { MaskBit } from "../src/reference/bits";

/** Electrons and mask of nx × ny counts (f32, rows of `stride` pixels from `inPtr` on), into rows of `outStride` pixels.
 * `zeroPtr`: f64, one for each row, or for each column when not `zeroForRow`. From `limit` on a pixel is saturated. What is not
 * finite, and 0 when `zeroIsMissing`, is NaN and missing. `countPtr`: three i32 that pixels saturated, not finite and 0 in that
 * sense are added to. */
export function electrons(
  inPtr: usize,
  stride: usize,
  nx: usize,
  ny: usize,
  zeroPtr: usize,
  zeroForRow: bool,
  gain: f64,
  limit: f32,
  zeroIsMissing: bool,
  electronsPtr: usize,
  maskPtr: usize,
  outStride: usize,
  countPtr: usize,
): void {
  const vectorEnd: usize = nx & ~3;
  const gains = f64x2.splat(gain);
  const limits = f32x4.splat(limit);
  const zeroOf = i32x4.splat(zeroIsMissing ? -1 : 0);
  const nothing = f32x4.splat(0);
  for (let y: usize = 0; y < ny; y++) {
    const from = inPtr + ((y * stride) << 2);
    const to = electronsPtr + ((y * outStride) << 2);
    const maskTo = maskPtr + y * outStride;
    let zeroAt = zeroForRow ? zeroPtr + (y << 3) : zeroPtr;
    let lowZero = v128.load64_splat(zeroAt);
    let highZero = lowZero;
    for (let x: usize = 0; x < vectorEnd; x += 4) {
      const counts = v128.load(from + (x << 2));
      if (!zeroForRow) {
        lowZero = v128.load(zeroPtr + (x << 3));
        highZero = v128.load(zeroPtr + (x << 3), 16);
      }
      const low = f64x2.mul(gains, f64x2.sub(f64x2.promote_low_f32x4(counts), lowZero));
      const highCounts = i8x16.shuffle(counts, counts, 8, 9, 10, 11, 12, 13, 14, 15, 8, 9, 10, 11, 12, 13, 14, 15);
      const high = f64x2.mul(gains, f64x2.sub(f64x2.promote_low_f32x4(highCounts), highZero));
      v128.store64_lane(to + (x << 2), f32x4.demote_f64x2_zero(low), 0);
      v128.store64_lane(to + (x << 2), f32x4.demote_f64x2_zero(high), 0, 8);
      store<u32>(maskTo + x, 0);
      // Of NaN and ±Infinity this difference is NaN.
      const odd = v128.or(
        v128.or(f32x4.ne(f32x4.sub(counts, counts), nothing), f32x4.ge(counts, limits)),
        v128.and(f32x4.eq(counts, nothing), zeroOf),
      );
      if (v128.any_true(odd)) {
        for (let lane: usize = x; lane < x + 4; lane++) {
          mark(from + (lane << 2), to + (lane << 2), maskTo + lane, limit, zeroIsMissing, countPtr);
        }
      }
    }
    for (let x = vectorEnd; x < nx; x++) {
      if (!zeroForRow) zeroAt = zeroPtr + (x << 3);
      store<f32>(to + (x << 2), <f32>(gain * (<f64>load<f32>(from + (x << 2)) - load<f64>(zeroAt))));
      store<u8>(maskTo + x, 0);
      mark(from + (x << 2), to + (x << 2), maskTo + x, limit, zeroIsMissing, countPtr);
    }
  }
}

/** Gives one pixel its mask bits, and NaN where it has no value. */
function mark(at: usize, to: usize, maskTo: usize, limit: f32, zeroIsMissing: bool, countPtr: usize): void {
  const count = load<f32>(at);
  const hasValue = count - count == 0;
  const isZero = zeroIsMissing && count == 0;
  let bits: u8 = 0;
  if (count >= limit) {
    bits |= <u8>MaskBit.saturated;
    store<i32>(countPtr, load<i32>(countPtr) + 1);
  }
  if (!hasValue) store<i32>(countPtr, load<i32>(countPtr, 4) + 1, 4);
  if (isZero) store<i32>(countPtr, load<i32>(countPtr, 8) + 1, 8);
  if (!hasValue || isZero) {
    bits |= <u8>MaskBit.missing;
    store<f32>(to, f32.NaN);
  }
  store<u8>(maskTo, bits);
}

/** Saturation bits for the pixels that follow and precede a run of saturated ones along a column: `growShort` of them, or
 * `growBleed` where the run is of `bleed` or more. Counts and mask as for `electrons`; `runPtr`: nx i32, all 0. */
export function growSaturation(
  inPtr: usize,
  stride: usize,
  nx: usize,
  ny: usize,
  limit: f32,
  maskPtr: usize,
  outStride: usize,
  bleed: i32,
  growShort: i32,
  growBleed: i32,
  runPtr: usize,
): void {
  const limits = f32x4.splat(limit);
  for (let y: usize = 0; y <= ny; y++) {
    const from = inPtr + ((y * stride) << 2);
    let x: usize = 0;
    while (x < nx) {
      // Four columns at a time where nothing is saturated and no run ends.
      if (y < ny && x + 4 <= nx) {
        const saturated = f32x4.ge(v128.load(from + (x << 2)), limits);
        if (!v128.any_true(v128.or(saturated, v128.load(runPtr + (x << 2))))) {
          x += 4;
          continue;
        }
      }
      const run = load<i32>(runPtr + (x << 2));
      if (y < ny && load<f32>(from + (x << 2)) >= limit) {
        store<i32>(runPtr + (x << 2), run + 1);
      } else if (run > 0) {
        store<i32>(runPtr + (x << 2), 0);
        const grow = run >= bleed ? growBleed : growShort;
        const first = max(0, <i32>y - run - grow);
        const end = min(<i32>ny, <i32>y + grow);
        for (let k = first; k < end; k++) {
          const at = maskPtr + <usize>k * outStride + x;
          store<u8>(at, load<u8>(at) | <u8>MaskBit.saturated);
        }
      }
      x++;
    }
  }
}

/** An image [ny × nx] of f32 or bytes (`T`) turned about its diagonal: [nx × ny], elsewhere. In squares that stay in cache. */
function turn<T extends number>(inPtr: usize, nx: usize, ny: usize, outPtr: usize): void {
  const SIDE: usize = 32;
  for (let y0: usize = 0; y0 < ny; y0 += SIDE) {
    for (let x0: usize = 0; x0 < nx; x0 += SIDE) {
      const yEnd = min(ny, y0 + SIDE);
      const xEnd = min(nx, x0 + SIDE);
      for (let x = x0; x < xEnd; x++) {
        for (let y = y0; y < yEnd; y++) {
          store<T>(outPtr + (x * ny + y) * sizeof<T>(), load<T>(inPtr + (y * nx + x) * sizeof<T>()));
        }
      }
    }
  }
}

export function turnFloat32(inPtr: usize, nx: usize, ny: usize, outPtr: usize): void {
  turn<f32>(inPtr, nx, ny, outPtr);
}

export function turnBytes(inPtr: usize, nx: usize, ny: usize, outPtr: usize): void {
  turn<u8>(inPtr, nx, ny, outPtr);
}
