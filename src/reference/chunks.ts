/** Which fibres of a column have still to settle. A cosmic ray touches a few fibres, and what it changes dies out within a few
 * more: after the first rounds only chunks of fibres are fitted again, each with a margin, while all others stand still. */
import { type Column, windowFirst } from "./column.js";

/** Fibres of a chunk. */
export const chunkFibres = 8;

/** Fibres k0 … k1 − 1. */
export type Stretch = [k0: number, k1: number];

/** A chunk and its margin, 4 × bandwidth fibres to each side: further out a change is felt by less than 1e-5 of itself, even
 * where fibres stand two pixels apart. */
export function stretchOf({ nFibre, bandwidth }: Column, chunk: number): Stretch {
  const margin = 4 * bandwidth;
  return [Math.max(chunk * chunkFibres - margin, 0), Math.min((chunk + 1) * chunkFibres + margin, nFibre)];
}

/** A chunk with half of its margin: what is written anew when only the chunk changed. */
export function innerStretch({ nFibre, bandwidth }: Column, chunk: number): Stretch {
  const margin = 2 * bandwidth;
  return [Math.max(chunk * chunkFibres - margin, 0), Math.min((chunk + 1) * chunkFibres + margin, nFibre)];
}

/** Rows of the windows of fibres k0 … k1 − 1: [from, to). */
export function rowsOf(column: Column, [k0, k1]: Stretch): [number, number] {
  return [windowFirst(column, k0), windowFirst(column, k1 - 1) + column.nWindow];
}

/** Calls the chunks of the fibres whose windows hold `row`. */
export function callRow(column: Column, row: number, called: Set<number>): void {
  for (let k = 0; k < column.nFibre; k++) {
    const first = windowFirst(column, k);
    if (row >= first && row < first + column.nWindow) called.add(Math.floor(k / chunkFibres));
  }
}

/** Chunks from the lowest fibres up, as they are settled. */
export function sorted(chunks: Set<number>): number[] {
  return [...chunks].sort((a, b) => a - b);
}
