/** What one extraction works on; src/kernels/extraction-words.ts draws the layout. */
import { Numbers, Word } from "../src/kernels/extraction-words";

export { MethodCode, Numbers, Word } from "../src/kernels/extraction-words";

export function count(job: usize, word: Word): i32 {
  return load<i32>(job + ((<usize>word) << 2));
}

export function pointer(job: usize, word: Word): usize {
  return <usize>load<u32>(job + ((<usize>word) << 2));
}

export function number(job: usize, which: Numbers): f64 {
  return load<f64>(pointer(job, Word.numbers) + ((<usize>which) << 3));
}

/** Rows of a window. */
export function windowRows(job: usize): i32 {
  return 2 * count(job, Word.halfWindow) + 1;
}

/** Rows of the scratch: the frame's and a margin of a window beyond each end. */
export function laneRows(job: usize): i32 {
  return count(job, Word.ny) + 2 * windowRows(job);
}
