/** A job of a kernel is a block of 32-bit words, counts and pointers; which word holds what, an enumeration in src/kernels/ says
 * for each kind of job. */

export function count(job: usize, word: i32): i32 {
  return load<i32>(job + ((<usize>word) << 2));
}

/** 0 where what it would point to is absent. */
export function pointer(job: usize, word: i32): usize {
  return <usize>load<u32>(job + ((<usize>word) << 2));
}
