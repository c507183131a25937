/** What one centring works on; src/kernels/centring-words.ts draws the layout. */
import { CentringNumber, CentringWord } from "../src/kernels/centring-words";
import { pointer } from "./words";

export { count, pointer } from "./words";

/** Where pair `pair` lies in an array of `nEntry` a pair. */
export function ofPair(job: usize, word: CentringWord, pair: i32, nEntry: i32): usize {
  return pointer(job, word) + ((<usize>pair * <usize>nEntry) << 4);
}

export function number(job: usize, which: CentringNumber): f64 {
  return load<f64>(pointer(job, CentringWord.numbers) + ((<usize>which) << 3));
}
