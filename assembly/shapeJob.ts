/** What a fit of single columns works on; src/kernels/shape-words.ts draws the layout. */
import { ShapeNumbers, ShapeWord } from "../src/kernels/shape-words";
import { count, pointer } from "./words";

export { ShapeNumbers, ShapeWord } from "../src/kernels/shape-words";
export { count, pointer } from "./words";

export const nLane: i32 = 2;

export function number(job: usize, which: ShapeNumbers): f64 {
  return load<f64>(pointer(job, ShapeWord.numbers) + ((<usize>which) << 3));
}

/** Column or lane `i` of an array that holds `n` f64 for each. */
export function rowOf(job: usize, word: ShapeWord, i: i32, n: i32): usize {
  return pointer(job, word) + ((<usize>i * <usize>n) << 3);
}

/** First rows of a lane's windows: [nFibre] i32. */
export function firstOf(job: usize, lane: i32): usize {
  return pointer(job, ShapeWord.first) + ((<usize>(lane * count(job, ShapeWord.nFibre))) << 2);
}

/** The column that a lane holds; where columns run out in the last tile, the last one once more. */
export function columnOf(job: usize, tile: i32, lane: i32): i32 {
  return min(nLane * tile + lane, count(job, ShapeWord.nColumn) - 1);
}
