/** Median by selection (Hoare 1961, CACM 4, 321: FIND), in place. */

/** Median of `n` ≥ 1 f64 at `ptr`, whose order is lost; the mean of the middle two when n is even. */
export function median(ptr: usize, n: i32): f64 {
  const half = n >> 1;
  const upper = select(ptr, n, half);
  if ((n & 1) == 1) return upper;
  let lower = load<f64>(ptr);
  for (let i = 1; i < half; i++) lower = max(lower, load<f64>(ptr + ((<usize>i) << 3)));
  return 0.5 * (lower + upper);
}

/** The q-quantile, q ∈ [0, 1], of `n` ≥ 1 f64 at `ptr`, whose order is lost: linear between the values beside it. */
export function quantile(ptr: usize, n: i32, q: f64): f64 {
  const at = q * <f64>(n - 1);
  const low = <i32>at;
  const lower = select(ptr, n, low);
  if (low + 1 >= n) return lower;
  // Behind the chosen one lies all that is larger.
  let upper = load<f64>(ptr + ((<usize>(low + 1)) << 3));
  for (let i = low + 2; i < n; i++) upper = min(upper, load<f64>(ptr + ((<usize>i) << 3)));
  return lower + (at - <f64>low) * (upper - lower);
}

/** Moves the element of rank `k` to place k, smaller ones before it, and returns it. */
function select(ptr: usize, n: i32, k: i32): f64 {
  let low: i32 = 0;
  let high = n - 1;
  while (low < high) {
    const pivot = load<f64>(ptr + ((<usize>k) << 3));
    let i = low;
    let j = high;
    while (i <= j) {
      while (load<f64>(ptr + ((<usize>i) << 3)) < pivot) i++;
      while (pivot < load<f64>(ptr + ((<usize>j) << 3))) j--;
      if (i <= j) {
        const held = load<f64>(ptr + ((<usize>i) << 3));
        store<f64>(ptr + ((<usize>i) << 3), load<f64>(ptr + ((<usize>j) << 3)));
        store<f64>(ptr + ((<usize>j) << 3), held);
        i++;
        j--;
      }
    }
    if (j < k) low = i;
    if (k < i) high = j;
  }
  return load<f64>(ptr + ((<usize>k) << 3));
}
