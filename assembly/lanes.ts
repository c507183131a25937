/** Lanes: every number of the column kernels is a v128 that holds the same quantity of neighbouring columns,
 * four of f32 or two of f64. Here, and only here, the code asks which of the two it is. */

/** Columns that one v128 holds. */
export function laneCount<T>(): i32 {
  return 16 / sizeof<T>();
}

/** The number `x` in every lane. */
export function spread<T extends number>(x: f64): v128 {
  return v128.splat<T>(<T>x);
}

/** `nValid` f32 pixels from `ptr` on, widened to the lanes' type; lanes past the last are 0. */
export function loadPixels<T extends number>(ptr: usize, nValid: i32): v128 {
  if (nValid < laneCount<T>()) return loadPixelsSingly<T>(ptr, nValid);
  if (sizeof<T>() == 4) return v128.load(ptr);
  return f64x2.promote_low_f32x4(v128.load64_zero(ptr));
}

/** `nValid` mask bytes from `ptr` on, one byte a lane, lowest lane in the lowest byte; lanes past the last read `beyond`. */
export function loadBits<T extends number>(ptr: usize, nValid: i32, beyond: u32): u32 {
  if (nValid == laneCount<T>()) return sizeof<T>() == 4 ? load<u32>(ptr) : <u32>load<u16>(ptr);
  let bits: u32 = 0;
  for (let lane: i32 = 0; lane < laneCount<T>(); lane++) {
    const byte: u32 = lane < nValid ? <u32>load<u8>(ptr + <usize>lane) : beyond;
    bits |= byte << (lane << 3);
  }
  return bits;
}

/** Lanes whose byte of `bits` is 0: all ones; the others: all zeros. */
export function lanesWithout<T extends number>(bits: u32): v128 {
  const wide = i32x4.extend_low_i16x8_u(i16x8.extend_low_i8x16_u(i32x4.splat(bits)));
  if (sizeof<T>() == 4) return i32x4.eq(wide, i32x4.splat(0));
  return i64x2.eq(i64x2.extend_low_i32x4_u(wide), i64x2.splat(0));
}

function loadPixelsSingly<T extends number>(ptr: usize, nValid: i32): v128 {
  let lanes = spread<T>(0);
  if (sizeof<T>() == 4) {
    if (nValid > 0) lanes = f32x4.replace_lane(lanes, 0, load<f32>(ptr));
    if (nValid > 1) lanes = f32x4.replace_lane(lanes, 1, load<f32>(ptr, 4));
    if (nValid > 2) lanes = f32x4.replace_lane(lanes, 2, load<f32>(ptr, 8));
  } else if (nValid > 0) {
    lanes = f64x2.replace_lane(lanes, 0, <f64>load<f32>(ptr));
  }
  return lanes;
}

/** The number at `ptr`, of the lanes' type, in every lane. */
export function loadSpread<T extends number>(ptr: usize): v128 {
  return sizeof<T>() == 4 ? v128.load32_splat(ptr) : v128.load64_splat(ptr);
}

/** One bit a lane, lowest lane lowest, made one byte a lane that holds `bit`. */
export function bytesOfLanes(lanes: i32, bit: u32): u32 {
  let bytes: u32 = 0;
  for (let lane: i32 = 0; lane < 4; lane++) if ((lanes >> lane) & 1) bytes |= bit << (lane << 3);
  return bytes;
}

/** Number of lane `lane` of the v128 at `ptr`. */
export function laneAt<T extends number>(ptr: usize, lane: i32): T {
  return load<T>(ptr + <usize>lane * sizeof<T>());
}

/** One bit for each lane of a comparison's result, lowest lane lowest. */
export function lanesSet<T extends number>(comparison: v128): i32 {
  return sizeof<T>() == 4 ? i32x4.bitmask(comparison) : i64x2.bitmask(comparison);
}

/** Whether any of the `n` 32-bit words from `ptr` on is not 0. */
export function anyBitsInWindow(ptr: usize, n: i32): bool {
  if (n < 4) return (load<u32>(ptr) | (n > 1 ? load<u32>(ptr, 4) : 0) | (n > 2 ? load<u32>(ptr, 8) : 0)) != 0;
  const end = ((<usize>n) << 2) - 16;
  let any = v128.load(ptr + end);
  for (let at: usize = 0; at < end; at += 16) any = v128.or(any, v128.load(ptr + at));
  return v128.any_true(any);
}
