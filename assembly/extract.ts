/** Extraction of columns, a group of lanes at a time; src/reference/extract.ts is the readable twin.
 *
 *     columns   |<------- block ------->|<------- block ------->|     profiles at four nodes of each block
 *               | group | group | …     |                             each v128 = the group's columns
 *
 * A block is a tile: threads share a frame by blocks. A lane's answer never depends on the lanes beside it: whatever is
 * done for one lane's sake leaves the others' numbers as they were. */
import { MaskBit } from "../src/reference/bits";
import { boxcar } from "./boxcar";
import {
  calledLanes,
  callFibre,
  callRow,
  chunkCount,
  chunkFibres,
  chunkMargin,
  clearCalls,
  prepareFibreOfRow,
  takeCalls,
} from "./chunks";
import {
  loadFit,
  loadGroup,
  loadTile,
  prepareMargins,
  prepareRowPolynomials,
  storeFit,
  storeGroup,
  storeModel,
  storeRejected,
  storeTile,
  tileColumns,
} from "./columns";
import { confront, reachOn } from "./cosmic";
import { solveCrosstalk, withoutCrosstalk } from "./crosstalk";
import { groupFlags } from "./flags";
import { count, laneRows, MethodCode, marginRows, pointer, Word, windowLaneRow, windowOffset, windowRows } from "./job";
import { finishSolution, jointCovariance, normalEquations, solveNormal } from "./joint";
import { laneCount, lanesSet, lanesWithout, loadBits, spread } from "./lanes";
import { addLight, addWindowLight, addWingLight } from "./light";
import { optimal } from "./optimal";
import { blockProfiles, interpolateProfiles, interpolateWings, prepareNodeShares } from "./profile";
import { weighByData } from "./variance";

/** Tables that all columns share: once a job and thread, before the first tile. */
export function prepareExtraction32(job: usize): void {
  prepareExtraction<f32>(job);
}

export function prepareExtraction64(job: usize): void {
  prepareExtraction<f64>(job);
}

/** Extracts the block of columns number `tile`. */
export function extractTile32(job: usize, tile: i32): void {
  extractTile<f32>(job, tile);
}

export function extractTile64(job: usize, tile: i32): void {
  extractTile<f64>(job, tile);
}

/** Takes into account what has grown in block number `tile` since it was extracted. */
export function settleTile32(job: usize, tile: i32): void {
  settleTile<f32>(job, tile);
}

export function settleTile64(job: usize, tile: i32): void {
  settleTile<f64>(job, tile);
}

function prepareExtraction<T extends number>(job: usize): void {
  prepareNodeShares<T>(job);
  prepareRowPolynomials<T>(job);
  prepareMargins<T>(job);
}

function extractTile<T extends number>(job: usize, number: i32): void {
  const block = number * count(job, Word.blockColumns);
  const x0 = max(block, count(job, Word.firstColumn));
  const x1 = min(block + count(job, Word.blockColumns), count(job, Word.endColumn));
  const nFibre = count(job, Word.nFibre);
  const nLane = laneCount<T>();
  memory.fill(pointer(job, Word.needed), 1, <usize>nFibre);
  blockProfiles<T>(job, block);
  prepareFibreOfRow(job);
  for (let tile = x0; tile < x1; tile += tileColumns) {
    const end = min(tile + tileColumns, x1);
    loadTile(job, tile);
    for (let x = tile; x < end; x += nLane) {
      interpolateProfiles<T>(job, x - block, 0, nFibre);
      interpolateWings<T>(job, x - block, 0, nFibre);
      extractGroup<T>(job, x, min(nLane, end - x), tile);
    }
    storeTile<T>(job, tile, end - tile);
  }
}

/** One group: settle variances and rejections, estimate, write out. */
function extractGroup<T extends number>(job: usize, x: i32, nValid: i32, tile: i32): void {
  const rejecting = count(job, Word.reject) != 0;
  const minRounds = count(job, Word.minRounds);
  const nFibre = count(job, Word.nFibre);
  const nRow = laneRows(job);
  const margin = marginRows(job);
  const top = nRow - margin;
  const everyLane = i32x4.splat(-1);
  loadGroup<T>(job, x, nValid, 0, nRow, tile);
  weighByData<T>(job, 0, nRow);
  normalEquations<T>(job, 0, nFibre, 0, true);
  clearCalls(job);
  memory.fill(pointer(job, Word.fluxes), 0, (<usize>nFibre) << 4);
  for (let round: i32 = 0; ; round++) {
    finishSolution<T>(job);
    takeSolution<T>(job, 0, nFibre, everyLane, round == minRounds);
    // In the last round most wings would change by a hundredth of a hundredth; but not where a hit has just gone.
    if (round == minRounds && round > 0) moveWings<T>(job);
    lightAfresh<T>(job, round < minRounds || minRounds == 0);
    if (round == minRounds) break;
    confront<T>(job, margin, top, everyLane, rejecting, rejecting, true);
    clearCalls(job);
    normalEquations<T>(job, 0, nFibre, 0, true);
  }
  const maxRounds = count(job, Word.maxRounds);
  confront<T>(job, margin, top, everyLane, rejecting, rejecting && minRounds < maxRounds, false);
  for (let round = minRounds; round < maxRounds && takeCalls(job); round++) {
    const more = rejecting && round + 1 < maxRounds;
    for (let chunk: i32 = 0; chunk < chunkCount(job); chunk++) {
      const lanes = v128.load(pointer(job, Word.activeChunks) + ((<usize>chunk) << 4));
      if (v128.any_true(lanes)) settleChunk<T>(job, chunk, lanes, rejecting, more);
    }
  }
  const lanes = (1 << nValid) - 1;
  if (rejecting) storeRejected(job, x, nValid);
  storeFit<T>(job, x, nValid, 0, nFibre, lanes, tile);
  storeModel<T>(job, x, nValid);
  if (count(job, Word.keepReach)) {
    for (let row = margin; row < top; row++) {
      v128.store(pointer(job, Word.reach) + ((<usize>row) << 4), reachOn<T>(job, row));
    }
  }
  estimate<T>(job, 0, nFibre);
  const raised = groupFlags<T>(job, x, 0, nFibre);
  storeGroup<T>(job, x, nValid, 0, nFibre, lanes, raised, tile);
}

/** Change of a flux, in units of the σ it would have alone, up to which it has settled. */
const settledSigma: f64 = 0.1;

/** Word.solution into Word.fluxes, in the lanes of `mask`; by how much each flux changed stays in Word.lastChange, and
 * fibres that moved by more than a tenth of their σ are called when `call`ing. */
function takeSolution<T extends number>(job: usize, k0: i32, k1: i32, mask: v128, call: bool): void {
  const fluxes = pointer(job, Word.fluxes);
  const solution = pointer(job, Word.solution);
  const lastChange = pointer(job, Word.lastChange);
  const rowBytes = (<usize>(count(job, Word.bandwidth) + 1)) << 4;
  const limit = spread<T>(settledSigma * settledSigma);
  let normal = pointer(job, Word.normal) + <usize>k0 * rowBytes;
  for (let k = k0; k < k1; k++) {
    const at = (<usize>k) << 4;
    const before = v128.load(fluxes + at);
    const fresh = v128.load(solution + at);
    const change = v128.sub<T>(fresh, before);
    v128.store(fluxes + at, v128.bitselect(fresh, before, mask));
    v128.store(lastChange + at, v128.bitselect(change, v128.load(lastChange + at), mask));
    if (call) {
      const squared = v128.mul<T>(v128.mul<T>(change, change), v128.load(normal));
      const moved = v128.and(mask, v128.gt<T>(squared, limit));
      if (v128.any_true(moved)) callFibre(job, k, moved);
    }
    normal += rowBytes;
  }
}

/** The wings of every fibre whose flux just changed by more than a tenth of its σ. */
function moveWings<T extends number>(job: usize): void {
  const rowBytes = (<usize>(count(job, Word.bandwidth) + 1)) << 4;
  const limit = spread<T>(settledSigma * settledSigma);
  for (let k: i32 = 0; k < count(job, Word.nFibre); k++) {
    const change = v128.load(pointer(job, Word.lastChange) + ((<usize>k) << 4));
    const squared = v128.mul<T>(
      v128.mul<T>(change, change),
      v128.load(pointer(job, Word.normal) + <usize>k * rowBytes),
    );
    const moved = v128.gt<T>(squared, limit);
    if (v128.any_true(moved)) addWingLight<T>(job, k, windowOffset(job, k), v128.and(change, moved));
  }
}

/** All light anew from Word.fluxes; the wings' only when asked for. */
function lightAfresh<T extends number>(job: usize, wings: bool): void {
  const bytes = (<usize>laneRows(job)) << 4;
  memory.fill(pointer(job, Word.model), 0, bytes);
  if (wings) memory.fill(pointer(job, Word.wingLight), 0, bytes);
  addLight<T>(job, 0, count(job, Word.nFibre), wings);
}

/** Another round for one chunk and its margin in `lanes`: variances, fit, light, and what that leaves. */
function settleChunk<T extends number>(job: usize, chunk: i32, lanes: v128, rejecting: bool, mark: bool): void {
  const nFibre = count(job, Word.nFibre);
  const k0 = max(chunk * chunkFibres - chunkMargin(job), 0);
  const k1 = min((chunk + 1) * chunkFibres + chunkMargin(job), nFibre);
  settleStretch<T>(job, k0, k1, 0, nFibre, lanes);
  const row0 = windowLaneRow(job, k0);
  const row1 = windowLaneRow(job, k1 - 1) + windowRows(job);
  confront<T>(job, row0, row1, lanes, rejecting, mark, false);
}

/** Fibres k0 … k1 − 1 anew in `lanes` while the others stand still. Of the fibres only `lowest` … `highest` − 1 are known. */
function settleStretch<T extends number>(job: usize, k0: i32, k1: i32, lowest: i32, highest: i32, lanes: v128): void {
  const bandwidth = count(job, Word.bandwidth);
  const row0 = windowLaneRow(job, k0);
  const row1 = windowLaneRow(job, k1 - 1) + windowRows(job);
  confront<T>(job, row0, row1, lanes, false, false, true);
  // Every fibre that sees one of these rows, so that the equations always belong to the variances as they are.
  normalEquations<T>(job, max(k0 - bandwidth, lowest), min(k1 + bandwidth, highest), lowest, false);
  solveNormal<T>(job, k0, k1);
  const fluxes = pointer(job, Word.fluxes);
  const before = pointer(job, Word.covariancesBelow); // free until the estimate
  memory.copy(before + ((<usize>k0) << 4), fluxes + ((<usize>k0) << 4), (<usize>(k1 - k0)) << 4);
  takeSolution<T>(job, k0, k1, lanes, true);
  const windowBytes = (<usize>windowRows(job)) << 4;
  for (let k = k0; k < k1; k++) {
    const at = (<usize>k) << 4;
    const change = v128.sub<T>(v128.load(fluxes + at), v128.load(before + at));
    const first = windowOffset(job, k);
    const weights = pointer(job, Word.weights) + <usize>k * windowBytes;
    addWindowLight<T>(pointer(job, Word.model) + first, weights, windowBytes, change);
    addWingLight<T>(job, k, first, change);
  }
}

function estimate<T extends number>(job: usize, k0: i32, k1: i32): void {
  const method = count(job, Word.method);
  if (method == MethodCode.joint) {
    jointCovariance<T>(job, k0, k1);
    return;
  }
  if (method == MethodCode.optimal) optimal<T>(job, k0, k1);
  else boxcar<T>(job, k0, k1);
  if (count(job, Word.crosstalk)) solveCrosstalk<T>(job, k0, k1);
  else withoutCrosstalk<T>(job, k0, k1);
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
  const first = load<i32>(pointer(job, Word.fibreOfRow) + ((<usize>row) << 2));
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
  estimate<T>(job, k0, k1);
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
