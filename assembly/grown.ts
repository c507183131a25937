/** What has grown since columns were extracted, taken into account: the chunks of fibres that see it are settled once more from
 * the fluxes that the first look left. src/reference/grown.ts is the same for one column. */
import { MaskBit } from "../src/reference/bits";
import {
  calledLanes,
  callRow,
  chunkCount,
  chunkFibres,
  chunkMargin,
  clearCalls,
  firstFibreOn,
  prepareFibreOfRow,
  takeCalls,
} from "./chunks";
import { loadGroup } from "./columns";
import { confront } from "./cosmic";
import { groupFlags } from "./flags";
import { count, marginRows, pointer, Word, windowLaneRow, windowRows } from "./job";
import { laneCount, lanesSet, lanesWithout, loadBits } from "./lanes";
import { addLight } from "./light";
import { blockProfiles, interpolateProfiles, interpolateWings } from "./profile";
import { estimate, settleStretch } from "./rounds";
import { loadFit, storeFit, storeGroup } from "./spectra";

/** Takes into account what has grown in block number `tile` since it was extracted. */
export function settleTile32(job: usize, tile: i32): void {
  settleTile<f32>(job, tile);
}

export function settleTile64(job: usize, tile: i32): void {
  settleTile<f64>(job, tile);
}

function settleTile<T extends number>(job: usize, number: i32): void {
  const block = number * count(job, Word.blockColumns);
  const x0 = max(block, count(job, Word.firstColumn));
  const x1 = min(block + count(job, Word.blockColumns), count(job, Word.endColumn));
  memory.fill(pointer(job, Word.needed), 0, <usize>count(job, Word.nFibre));
  blockProfiles<T>(job, block); // windows alone, to tell whom a pixel belongs to
  prepareFibreOfRow(job);
  if (!needGrown(job, x0, x1)) return;
  blockProfiles<T>(job, block);
  for (let x = x0; x < x1; x += laneCount<T>()) {
    const nValid = min(laneCount<T>(), x1 - x);
    if (!callGrown<T>(job, x, nValid)) continue;
    takeCalls(job);
    for (let chunk: i32 = 0; chunk < chunkCount(job); chunk++) {
      const lanes = v128.load(pointer(job, Word.activeChunks) + ((<usize>chunk) << 4));
      if (v128.any_true(lanes)) settleGrown<T>(job, x, x - block, nValid, chunk, lanes);
    }
  }
}

/** Notes in Word.needed the fibres that have to do with what has grown in columns x0 … x1 − 1. Returns whether there is
 * any. */
function needGrown(job: usize, x0: i32, x1: i32): bool {
  const nx = <usize>count(job, Word.nx);
  const margin = marginRows(job);
  let at = pointer(job, Word.rejected) + <usize>x0;
  let any = false;
  for (let y: i32 = 0; y < count(job, Word.ny); y++) {
    if (anyByte(at, x1 - x0, <u8>MaskBit.grown)) {
      any = true;
      needRow(job, margin + y);
    }
    at += nx;
  }
  return any;
}

/** Whether any of `n` bytes has `bit`. */
function anyByte(ptr: usize, n: i32, bit: u8): bool {
  let i: i32 = 0;
  let wide = i32x4.splat(0);
  for (; i + 16 <= n; i += 16) wide = v128.or(wide, v128.load(ptr + <usize>i));
  if (v128.any_true(v128.and(wide, i8x16.splat(bit)))) return true;
  let any: u8 = 0;
  for (; i < n; i++) any |= load<u8>(ptr + <usize>i);
  return (any & bit) != 0;
}

/** Fibres whose windows hold the lane row, with all that are fitted beside them or whose wings reach in. */
function needRow(job: usize, row: i32): void {
  const nFibre = count(job, Word.nFibre);
  const first = firstFibreOn(job, row);
  let last = first;
  while (last < nFibre && windowLaneRow(job, last) <= row) last++;
  const spare = chunkFibres + chunkMargin(job) + count(job, Word.bandwidth);
  let k0 = max(first - spare, 0);
  let k1 = min(last + spare, nFibre);
  const reach = count(job, Word.wing) + windowRows(job);
  const low = windowLaneRow(job, min(k0, nFibre - 1)) - reach;
  const high = windowLaneRow(job, max(k1 - 1, 0)) + reach;
  while (k0 > 0 && windowLaneRow(job, k0 - 1) >= low) k0--;
  while (k1 < nFibre && windowLaneRow(job, k1) <= high) k1++;
  memory.fill(pointer(job, Word.needed) + <usize>k0, 1, <usize>max(k1 - k0, 0));
}

/** Calls the fibres that see a grown pixel of the group. Returns whether there is any. */
function callGrown<T extends number>(job: usize, x: i32, nValid: i32): bool {
  const nx = <usize>count(job, Word.nx);
  const margin = marginRows(job);
  const grown: u32 = 0x01010101 * MaskBit.grown;
  let at = pointer(job, Word.rejected) + <usize>x;
  let any = false;
  clearCalls(job);
  for (let y: i32 = 0; y < count(job, Word.ny); y++) {
    const bits = loadBits<T>(at, nValid, 0) & grown;
    at += nx;
    if (bits == 0) continue;
    callRow(job, margin + y, v128.not(lanesWithout<T>(bits)));
    any = true;
  }
  return any;
}

/** One chunk of a group once more in `lanes`, from the fluxes that the first look left, without further rejection. */
function settleGrown<T extends number>(job: usize, x: i32, offset: i32, nValid: i32, chunk: i32, lanes: v128): void {
  const nFibre = count(job, Word.nFibre);
  const reach = chunkMargin(job);
  const k0 = max(chunk * chunkFibres - reach, 0);
  const k1 = min((chunk + 1) * chunkFibres + reach, nFibre);
  const from = max(k0 - count(job, Word.bandwidth), 0);
  const to = min(k1 + count(job, Word.bandwidth), nFibre);
  const row0 = windowLaneRow(job, from);
  const row1 = windowLaneRow(job, to - 1) + windowRows(job);
  openStretch<T>(job, x, offset, nValid, from, to, row0, row1);
  confront<T>(job, row0, row1, lanes, false, false, true);
  let unsettled = lanes;
  for (let round: i32 = 0; round < count(job, Word.maxRounds); round++) {
    clearCalls(job);
    settleStretch<T>(job, k0, k1, from, to, unsettled);
    if (round + 1 < count(job, Word.minRounds)) continue;
    unsettled = v128.and(unsettled, calledLanes(job));
    if (!v128.any_true(unsettled)) break;
  }
  confront<T>(job, windowLaneRow(job, k0), windowLaneRow(job, k1 - 1) + windowRows(job), lanes, false, false, false);
  const s0 = max(chunk * chunkFibres - (reach >> 1), 0);
  const s1 = min((chunk + 1) * chunkFibres + (reach >> 1), nFibre);
  const stored = lanesSet<T>(lanes) & ((1 << nValid) - 1);
  storeFit<T>(job, x, nValid, s0, s1, stored, -1);
  estimate<T>(job, k0, k1, false);
  groupFlags<T>(job, x, k0, k1);
  storeGroup<T>(job, x, nValid, s0, s1, stored, true, -1);
}

/** Fibres `from` … `to` − 1 of a group as the first look left them: profiles, pixels, fluxes and their light, with that of the
 * wings that reach in. */
function openStretch<T extends number>(
  job: usize,
  x: i32,
  offset: i32,
  nValid: i32,
  from: i32,
  to: i32,
  row0: i32,
  row1: i32,
): void {
  const wing = count(job, Word.wing);
  const nWindow = windowRows(job);
  let w0 = from;
  let w1 = to;
  while (w0 > 0 && windowLaneRow(job, w0 - 1) + nWindow + wing > row0) w0--;
  while (w1 < count(job, Word.nFibre) && windowLaneRow(job, w1) - wing < row1) w1++;
  interpolateProfiles<T>(job, offset, w0, w1);
  interpolateWings<T>(job, offset, w0, w1);
  loadGroup<T>(job, x, nValid, row0, row1, -1);
  loadFit<T>(job, x, nValid, w0, w1);
  const first = (<usize>(windowLaneRow(job, w0) - wing)) << 4;
  const bytes = ((<usize>(windowLaneRow(job, w1 - 1) + nWindow + wing)) << 4) - first;
  memory.fill(pointer(job, Word.model) + first, 0, bytes);
  memory.fill(pointer(job, Word.wingLight) + first, 0, bytes);
  addLight<T>(job, w0, w1, true);
}
