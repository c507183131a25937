/** Extraction of columns, a group of lanes at a time; src/reference/extract.ts is the readable twin.
 *
 *     columns   |<------- block ------->|<------- block ------->|     profiles at the nodes of each block
 *               | group | group | …     |                             each v128 = the group's columns
 *
 * A block is a tile: threads share a frame by blocks. A lane's answer never depends on the lanes beside it: whatever is
 * done for one lane's sake leaves the others' numbers as they were. */
import { chunkCount, clearCalls, prepareFibreOfRow, takeCalls } from "./chunks";
import { loadGroup, loadTile, prepareMargins, prepareRowPolynomials, tileColumns } from "./columns";
import { confront, reachOn } from "./cosmic";
import { groupFlags } from "./flags";
import { count, laneRows, marginRows, pointer, Word } from "./job";
import { normalEquations } from "./joint";
import { laneCount } from "./lanes";
import { blockProfiles, interpolateProfiles, interpolateWings, prepareNodeShares } from "./profile";
import { estimate, finishSolution, moveWings, settleChunk } from "./rounds";
import { storeFit, storeGroup, storeRejected, storeTile } from "./spectra";

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
  const winged = count(job, Word.wing) != 0;
  const everyLane = i32x4.splat(-1);
  loadGroup<T>(job, x, nValid, 0, nRow, tile);
  normalEquations<T>(job, 0, nFibre, 0, true);
  clearCalls(job);
  memory.fill(pointer(job, Word.fluxes), 0, (<usize>nFibre) << 4);
  for (let round: i32 = 0; ; round++) {
    // In the last round most wings would change by a hundredth of a hundredth; but not where a hit has just gone.
    const someWings = round == minRounds && round > 0;
    finishSolution<T>(job, round == minRounds, winged && !someWings);
    if (winged && someWings) moveWings<T>(job);
    if (round == minRounds) break;
    confront<T>(job, margin, top, everyLane, rejecting, rejecting, true);
    clearCalls(job);
    normalEquations<T>(job, 0, nFibre, 0, true);
  }
  const maxRounds = count(job, Word.maxRounds);
  confront<T>(job, margin, top, everyLane, rejecting, rejecting && minRounds < maxRounds, false);
  let factored = true;
  for (let round = minRounds; round < maxRounds && takeCalls(job); round++) {
    factored = false;
    const more = rejecting && round + 1 < maxRounds;
    for (let chunk: i32 = 0; chunk < chunkCount(job); chunk++) {
      const lanes = v128.load(pointer(job, Word.activeChunks) + ((<usize>chunk) << 4));
      if (v128.any_true(lanes)) settleChunk<T>(job, chunk, lanes, rejecting, more);
    }
  }
  const lanes = (1 << nValid) - 1;
  if (rejecting) storeRejected(job, x, nValid);
  storeFit<T>(job, x, nValid, 0, nFibre, lanes, tile);
  if (count(job, Word.keepReach)) {
    for (let row = margin; row < top; row++) {
      v128.store(pointer(job, Word.reach) + ((<usize>row) << 4), reachOn<T>(job, row));
    }
  }
  estimate<T>(job, 0, nFibre, factored);
  const raised = groupFlags<T>(job, x, 0, nFibre);
  storeGroup<T>(job, x, nValid, 0, nFibre, lanes, raised, tile);
}
