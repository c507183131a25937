/** Which fibres a group of columns has still to settle: chunks of eight, each with the lanes that ask for it.
 * src/reference/chunks.ts is the same for one column. */
import { count, marginRows, pointer, Word, windowLaneRow } from "./job";

/** Fibres of a chunk. */
export const chunkFibres: i32 = 8;

export function chunkCount(job: usize): i32 {
  return (count(job, Word.nFibre) + chunkFibres - 1) / chunkFibres;
}

/** Fibres to each side of a chunk that are solved with it: further out a change is felt by less than 1e-5 of itself, even
 * where fibres stand two pixels apart. */
export function chunkMargin(job: usize): i32 {
  return 4 * count(job, Word.bandwidth);
}

export function clearCalls(job: usize): void {
  memory.fill(pointer(job, Word.nextChunks), 0, (<usize>chunkCount(job)) << 4);
}

/** Calls fibre k's chunk in `lanes`. */
export function callFibre(job: usize, k: i32, lanes: v128): void {
  const at = pointer(job, Word.nextChunks) + ((<usize>(k / chunkFibres)) << 4);
  v128.store(at, v128.or(v128.load(at), lanes));
}

/** Calls every fibre whose window holds the lane row `row`. */
export function callRow(job: usize, row: i32, lanes: v128): void {
  const nFibre = count(job, Word.nFibre);
  for (let k = firstFibreOn(job, row); k < nFibre && windowLaneRow(job, k) <= row; k++) callFibre(job, k, lanes);
}

/** Lanes in which any chunk is called. */
export function calledLanes(job: usize): v128 {
  let any = i32x4.splat(0);
  for (let chunk: i32 = 0; chunk < chunkCount(job); chunk++) {
    any = v128.or(any, v128.load(pointer(job, Word.nextChunks) + ((<usize>chunk) << 4)));
  }
  return any;
}

/** The calls become what is to be done; nothing is called any more. Returns whether there is anything. */
export function takeCalls(job: usize): bool {
  const active = pointer(job, Word.activeChunks);
  const calls = pointer(job, Word.nextChunks);
  let any = i32x4.splat(0);
  for (let at: usize = 0; at < (<usize>chunkCount(job)) << 4; at += 16) {
    const lanes = v128.load(calls + at);
    any = v128.or(any, lanes);
    v128.store(active + at, lanes);
  }
  clearCalls(job);
  return v128.any_true(any);
}

/** For every lane row the first fibre whose window ends above it: Word.fibreOfRow, once a block. */
export function prepareFibreOfRow(job: usize): void {
  const nFibre = count(job, Word.nFibre);
  const nRow = count(job, Word.ny) + 2 * marginRows(job);
  const nWindow = 2 * count(job, Word.halfWindow) + 1;
  const out = pointer(job, Word.fibreOfRow);
  let row: i32 = 0;
  for (let k: i32 = 0; k < nFibre; k++) {
    const end = windowLaneRow(job, k) + nWindow;
    for (; row < end; row++) store<i32>(out + ((<usize>row) << 2), k);
  }
  for (; row < nRow; row++) store<i32>(out + ((<usize>row) << 2), nFibre);
}

/** The first fibre whose window ends above the lane row. */
export function firstFibreOn(job: usize, row: i32): i32 {
  return load<i32>(pointer(job, Word.fibreOfRow) + ((<usize>row) << 2));
}
