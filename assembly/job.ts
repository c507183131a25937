/** What one extraction works on; src/kernels/extraction-words.ts draws the layout. */
import { Numbers, Word } from "../src/kernels/extraction-words";
import { count, pointer } from "./words";

export { MethodCode, Numbers, Word } from "../src/kernels/extraction-words";
export { count, pointer } from "./words";

export function number(job: usize, which: Numbers): f64 {
  return load<f64>(pointer(job, Word.numbers) + ((<usize>which) << 3));
}

/** Rows of a window. */
export function windowRows(job: usize): i32 {
  return 2 * count(job, Word.halfWindow) + 1;
}

/** Lane rows before the frame's first: a window and its wing may lie beyond the frame, and two rows more are looked at. */
export function marginRows(job: usize): i32 {
  return windowRows(job) + count(job, Word.wing) + 2;
}

/** Rows of the scratch: the frame's and a margin beyond each end. */
export function laneRows(job: usize): i32 {
  return count(job, Word.ny) + 2 * marginRows(job);
}

/** Where fibre k's weights begin. */
export function windowWeights(job: usize, k: i32): usize {
  return pointer(job, Word.weights) + ((<usize>k * <usize>windowRows(job)) << 4);
}

/** First row of fibre k's window, counted from the frame's row 0. */
export function windowStartOf(job: usize, k: i32): i32 {
  return load<i32>(pointer(job, Word.start) + ((<usize>k) << 2));
}

/** First row of fibre k's window as a lane row. */
export function windowLaneRow(job: usize, k: i32): i32 {
  return windowStartOf(job, k) + marginRows(job);
}

/** How many bytes into the lane rows fibre k's window begins. */
export function windowOffset(job: usize, k: i32): usize {
  return (<usize>windowLaneRow(job, k)) << 4;
}
