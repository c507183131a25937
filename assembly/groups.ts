/** Means over groups of neighbouring columns, row by row, cosmic rays left out; src/kernels/groups-words.ts draws the job.
 * A tile is four rows. First all medians, then the means, which look at the medians of the rows beside them.
 * The twin is src/reference/groups.ts. */
import { GroupWord } from "../src/kernels/groups-words";
import { count, pointer } from "./words";

/** σ² that a pixel may stand above its row's median: KAPPA_HIT² of the twin. */
const hitSquare: f32 = 64.0;

/** Medians of four rows in every group; lanes are the rows. A sorting network takes the same steps in all lanes, and
 * pixels without value go to its end as ∞. NaN where there is no value. */
export function groupMedians(job: usize, tile: i32): void {
  const nRow = <usize>count(job, GroupWord.nRow);
  const strideBytes = (<usize>count(job, GroupWord.stride)) << 2;
  const row = (<usize>tile) << 2;
  const rowPtr = pointer(job, GroupWord.electrons) + row * strideBytes;
  const scratch = pointer(job, GroupWord.scratch);
  const nGroup = <usize>count(job, GroupWord.nGroup);
  const stride = <usize>count(job, GroupWord.stride);
  dropUnused(rowPtr, pointer(job, GroupWord.nUsed) + row * stride, stride << 2);
  for (let g: usize = 0; g < nGroup; g++) {
    const from = <usize>load<i32>(pointer(job, GroupWord.from) + (g << 2));
    const width = load<i32>(pointer(job, GroupWord.width) + (g << 2));
    const good = transpose(rowPtr + (from << 2), strideBytes, width, scratch);
    sort(
      <usize>load<u32>(pointer(job, GroupWord.network) + (g << 2)),
      load<i32>(pointer(job, GroupWord.nComparator) + (g << 2)),
      scratch,
    );
    const out = pointer(job, GroupWord.median) + ((g * nRow + row) << 3);
    store<f64>(out, middle(scratch, i32x4.extract_lane(good, 0)));
    store<f64>(out, middle(scratch + 4, i32x4.extract_lane(good, 1)), 8);
    store<f64>(out, middle(scratch + 8, i32x4.extract_lane(good, 2)), 16);
    store<f64>(out, middle(scratch + 12, i32x4.extract_lane(good, 3)), 24);
  }
}

/** NaN in place of each of `n` pixels that no frame has. */
function dropUnused(electrons: usize, nUsed: usize, n: usize): void {
  let i: usize = 0;
  for (; i + 16 <= n; i += 16) {
    if (i8x16.all_true(v128.load(nUsed + i))) continue;
    for (let at = i; at < i + 16; at++) if (load<u8>(nUsed + at) == 0) store<f32>(electrons + (at << 2), NaN);
  }
  for (; i < n; i++) if (load<u8>(nUsed + i) == 0) store<f32>(electrons + (i << 2), NaN);
}

/** Four rows of `width` pixels to [column][row], NaN to ∞. Returns how many each row has that are not NaN. */
function transpose(ptr: usize, strideBytes: usize, width: i32, outPtr: usize): v128 {
  const infinity = f32x4.splat(Infinity);
  let good = i32x4.splat(0);
  for (let x: i32 = 0; x < width; x += 4) {
    const a = v128.load(ptr);
    const b = v128.load(ptr + strideBytes);
    const c = v128.load(ptr + 2 * strideBytes);
    const d = v128.load(ptr + 3 * strideBytes);
    const ab = v128.shuffle<i32>(a, b, 0, 4, 1, 5);
    const cd = v128.shuffle<i32>(c, d, 0, 4, 1, 5);
    const ab2 = v128.shuffle<i32>(a, b, 2, 6, 3, 7);
    const cd2 = v128.shuffle<i32>(c, d, 2, 6, 3, 7);
    const nLeft = width - x;
    good = place(v128.shuffle<i64>(ab, cd, 0, 2), infinity, good, outPtr);
    if (nLeft > 1) good = place(v128.shuffle<i64>(ab, cd, 1, 3), infinity, good, outPtr + 16);
    if (nLeft > 2) good = place(v128.shuffle<i64>(ab2, cd2, 0, 2), infinity, good, outPtr + 32);
    if (nLeft > 3) good = place(v128.shuffle<i64>(ab2, cd2, 1, 3), infinity, good, outPtr + 48);
    ptr += 16;
    outPtr += 64;
  }
  return good;
}

function place(values: v128, infinity: v128, good: v128, outPtr: usize): v128 {
  const isValue = f32x4.eq(values, values);
  v128.store(outPtr, v128.bitselect(values, infinity, isValue));
  return i32x4.sub(good, isValue);
}

/** Each comparator puts the smaller of two lane rows first. */
function sort(networkPtr: usize, n: i32, ptr: usize): void {
  const end = networkPtr + ((<usize>n) << 3);
  for (; networkPtr < end; networkPtr += 8) {
    const first = ptr + <usize>load<u32>(networkPtr);
    const second = ptr + <usize>load<u32>(networkPtr, 4);
    const a = v128.load(first);
    const b = v128.load(second);
    v128.store(first, f32x4.pmin(a, b));
    v128.store(second, f32x4.pmax(a, b));
  }
}

/** The median of the first `n` of one lane's sorted values. */
function middle(ptr: usize, n: i32): f64 {
  if (n == 0) return NaN;
  const half = ptr + ((<usize>(n >> 1)) << 4);
  const upper = <f64>load<f32>(half);
  return (n & 1) == 1 ? upper : 0.5 * (<f64>load<f32>(half - 16) + upper);
}

/** Means of four rows in every group, with the variance of what is left. */
export function groupMeans(job: usize, tile: i32): void {
  const nRow = count(job, GroupWord.nRow);
  const nGroup = count(job, GroupWord.nGroup);
  for (let row = 4 * tile; row < 4 * tile + 4; row++) {
    for (let g: i32 = 0; g < nGroup; g++) {
      const medians = pointer(job, GroupWord.median) + ((<usize>g * <usize>nRow) << 3);
      const here = load<f64>(medians + ((<usize>row) << 3));
      const slope = 0.5 * range(below(medians, row), orZero(here), above(medians, row, nRow));
      averageRow(job, row, g, <f32>here, <f32>slope);
    }
  }
}

function below(medians: usize, row: i32): f64 {
  return orZero(load<f64>(medians + ((<usize>max(0, row - 1)) << 3)));
}

function above(medians: usize, row: i32, nRow: i32): f64 {
  return orZero(load<f64>(medians + ((<usize>min(nRow - 1, row + 1)) << 3)));
}

function orZero(x: f64): f64 {
  return x == x ? x : 0.0;
}

function range(a: f64, b: f64, c: f64): f64 {
  return max(a, max(b, c)) - min(a, min(b, c));
}

/** Lanes are four columns. */
function averageRow(job: usize, row: i32, g: i32, rowMedian: f32, slope: f32): void {
  const stride = <usize>count(job, GroupWord.stride);
  const from = <usize>load<i32>(pointer(job, GroupWord.from) + ((<usize>g) << 2));
  const width = load<i32>(pointer(job, GroupWord.width) + ((<usize>g) << 2));
  const at = <usize>row * stride + from;
  const electrons = pointer(job, GroupWord.electrons) + (at << 2);
  const fixedRow = <usize>load<i32>(pointer(job, GroupWord.fixedRow) + ((<usize>row) << 2));
  const fixed = pointer(job, GroupWord.fixedVariance) + ((fixedRow * stride + from) << 2);
  const nUsed: usize = count(job, GroupWord.isSingle) != 0 ? 0 : pointer(job, GroupWord.nUsed);
  const inverse = pointer(job, GroupWord.inverseResponse);
  const relative = pointer(job, GroupWord.responseRelativeVariance);
  const one = f32x4.splat(1.0);
  const light = f32x4.splat(max<f32>(rowMedian, 0.0));
  const lightSquare = f32x4.mul(light, light);
  const expected = f32x4.splat(rowMedian + slope);
  let low = f64x2.splat(0);
  let high = f64x2.splat(0);
  let fixedSum = f32x4.splat(0);
  let perElectronSum = f32x4.splat(0);
  let kept = i32x4.splat(0);
  for (let x: i32 = 0; x < width; x += 4) {
    const bytes = (<usize>x) << 2;
    const value = v128.load(electrons + bytes);
    const own = v128.load(fixed + bytes);
    const perElectron = inverse == 0 ? one : v128.load(inverse + (at << 2) + bytes);
    let variance = f32x4.add(own, f32x4.mul(light, perElectron));
    if (relative != 0) variance = f32x4.add(variance, f32x4.mul(v128.load(relative + (at << 2) + bytes), lightSquare));
    const excess = f32x4.pmax(f32x4.sub(value, expected), f32x4.splat(0));
    let share = one;
    if (nUsed != 0) share = f32x4.div(one, f32x4.convert_i32x4_u(widened(nUsed + at + <usize>x)));
    const isHit = f32x4.gt(f32x4.mul(excess, excess), f32x4.mul(f32x4.mul(f32x4.splat(hitSquare), variance), share));
    let keep = v128.andnot(f32x4.eq(value, value), isHit);
    if (width - x < 4) keep = v128.and(keep, firstLanes(width - x));
    const light4 = v128.and(value, keep);
    low = f64x2.add(low, f64x2.promote_low_f32x4(light4));
    high = f64x2.add(high, f64x2.promote_low_f32x4(v128.shuffle<i64>(light4, light4, 1, 0)));
    fixedSum = f32x4.add(fixedSum, v128.and(f32x4.mul(own, share), keep));
    perElectronSum = f32x4.add(perElectronSum, v128.and(f32x4.mul(perElectron, share), keep));
    kept = i32x4.sub(kept, keep);
  }
  const n = total(kept);
  const n2 = <f64>n * <f64>n;
  const both = f64x2.add(low, high);
  const out = <usize>g * <usize>count(job, GroupWord.nRow) + <usize>row;
  store<f64>(
    pointer(job, GroupWord.mean) + (out << 3),
    (f64x2.extract_lane(both, 0) + f64x2.extract_lane(both, 1)) / <f64>n,
  );
  store<i32>(pointer(job, GroupWord.nKept) + (out << 2), n);
  store<f64>(pointer(job, GroupWord.meanFixed) + (out << 3), sum4(fixedSum) / n2);
  store<f64>(pointer(job, GroupWord.meanPerElectron) + (out << 3), sum4(perElectronSum) / n2);
}

/** Four bytes as four integers. */
function widened(ptr: usize): v128 {
  return i32x4.extend_low_i16x8_u(i16x8.extend_low_i8x16_u(v128.load32_zero(ptr)));
}

/** All ones in the first `n` lanes. */
function firstLanes(n: i32): v128 {
  return i32x4.lt_s(i32x4(0, 1, 2, 3), i32x4.splat(n));
}

function total(lanes: v128): i32 {
  return (
    i32x4.extract_lane(lanes, 0) +
    i32x4.extract_lane(lanes, 1) +
    i32x4.extract_lane(lanes, 2) +
    i32x4.extract_lane(lanes, 3)
  );
}

function sum4(lanes: v128): f64 {
  return (
    <f64>f32x4.extract_lane(lanes, 0) +
    <f64>f32x4.extract_lane(lanes, 1) +
    <f64>f32x4.extract_lane(lanes, 2) +
    <f64>f32x4.extract_lane(lanes, 3)
  );
}
