/** Median of a list: the middle value, or the mean of the middle two. NaN for an empty list. */
export function median(values: ArrayLike<number>): number {
  const sorted = Float64Array.from(values).sort();
  const half = sorted.length >> 1;
  return sorted.length % 2 === 1 ? sorted[half] : 0.5 * (sorted[half - 1] + sorted[half]);
}

/** The same of the first `n` of `values`, whose order is lost: selection instead of sorting (Hoare 1961, CACM 4, 321: FIND).
 * Numbers only, no NaN. */
export function medianInPlace(values: Float64Array, n: number): number {
  if (n === 0) return Number.NaN;
  const half = n >> 1;
  const upper = select(values, n, half);
  if (n % 2 === 1) return upper;
  let lower = values[0];
  for (let i = 1; i < half; i++) if (values[i] > lower) lower = values[i];
  return 0.5 * (lower + upper);
}

/** Moves the element of rank `k` among the first n to place k, smaller ones before it, and returns it (Hoare 1961, CACM 4, 321:
 * FIND). */
export function select(values: Float64Array, n: number, k: number): number {
  let low = 0;
  let high = n - 1;
  while (low < high) {
    const pivot = values[k];
    let i = low;
    let j = high;
    while (i <= j) {
      while (values[i] < pivot) i++;
      while (pivot < values[j]) j--;
      if (i <= j) {
        const held = values[i];
        values[i++] = values[j];
        values[j--] = held;
      }
    }
    if (j < k) low = i;
    if (k < i) high = j;
  }
  return values[k];
}

/** The value at which half of the weight lies at or below; NaN for an empty list. */
export function weightedMedian(values: ArrayLike<number>, weights: ArrayLike<number>): number {
  const order = Array.from({ length: values.length }, (_, i) => i).sort((a, b) => values[a] - values[b]);
  let half = 0;
  for (let i = 0; i < weights.length; i++) half += weights[i] / 2;
  let sum = 0;
  for (const i of order) {
    sum += weights[i];
    if (sum >= half) return values[i];
  }
  return Number.NaN;
}
