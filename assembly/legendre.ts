/** Σ_j c_j P_j(t) by the three-term recurrence (j+1) P_{j+1} = (2j+1) t P_j − j P_{j−1}.
 * `coefPtr`: nCoef f64. The reference twin is src/reference/legendre.ts, operation for operation. */
export function legendreValue(coefPtr: usize, nCoef: i32, t: f64): f64 {
  let below: f64 = 1.0;
  let here: f64 = t;
  let sum: f64 = load<f64>(coefPtr);
  for (let j: i32 = 1; j < nCoef; j++) {
    sum += load<f64>(coefPtr + ((<usize>j) << 3)) * here;
    const above: f64 = (<f64>(2 * j + 1) * t * here - <f64>j * below) / <f64>(j + 1);
    below = here;
    here = above;
  }
  return sum;
}
