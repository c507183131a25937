// What values an image holds, in a few numbers, for the question whether a detector can have written it.
// The reference twin is src/reference/census.ts.

/** Of `n` f32 at `ptr`, into five f64 at `outPtr`: how many are finite, of these how many negative and how many not whole, the
 * lowest and the highest; ±Infinity where none is finite. */
export function census(ptr: usize, n: usize, outPtr: usize): void {
  const vectorEnd: usize = n & ~3;
  const nothing = f32x4.splat(0);
  let nFinite = i32x4.splat(0);
  let nNegative = i32x4.splat(0);
  let nFraction = i32x4.splat(0);
  let lowest = f32x4.splat(Infinity);
  let highest = f32x4.splat(-Infinity);
  for (let i: usize = 0; i < vectorEnd; i += 4) {
    const values = v128.load(ptr + (i << 2));
    const finite = f32x4.eq(f32x4.sub(values, values), nothing);
    // A lane that holds is −1.
    nFinite = i32x4.sub(nFinite, finite);
    nNegative = i32x4.sub(nNegative, v128.and(finite, f32x4.lt(values, nothing)));
    nFraction = i32x4.sub(nFraction, v128.and(finite, f32x4.ne(values, f32x4.floor(values))));
    lowest = v128.bitselect(f32x4.pmin(lowest, values), lowest, finite);
    highest = v128.bitselect(f32x4.pmax(highest, values), highest, finite);
  }
  let finite = sumOfLanes(nFinite);
  let negative = sumOfLanes(nNegative);
  let fraction = sumOfLanes(nFraction);
  let low = min(
    min(f32x4.extract_lane(lowest, 0), f32x4.extract_lane(lowest, 1)),
    min(f32x4.extract_lane(lowest, 2), f32x4.extract_lane(lowest, 3)),
  );
  let high = max(
    max(f32x4.extract_lane(highest, 0), f32x4.extract_lane(highest, 1)),
    max(f32x4.extract_lane(highest, 2), f32x4.extract_lane(highest, 3)),
  );
  for (let i = vectorEnd; i < n; i++) {
    const value = load<f32>(ptr + (i << 2));
    if (value - value != 0) continue;
    finite++;
    if (value < 0) negative++;
    if (value != floor(value)) fraction++;
    low = min(low, value);
    high = max(high, value);
  }
  store<f64>(outPtr, <f64>finite);
  store<f64>(outPtr, <f64>negative, 8);
  store<f64>(outPtr, <f64>fraction, 16);
  store<f64>(outPtr, <f64>low, 24);
  store<f64>(outPtr, <f64>high, 32);
}

function sumOfLanes(counts: v128): i32 {
  return (
    i32x4.extract_lane(counts, 0) +
    i32x4.extract_lane(counts, 1) +
    i32x4.extract_lane(counts, 2) +
    i32x4.extract_lane(counts, 3)
  );
}
