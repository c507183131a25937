/** The error function, erf(x) = 2/√π ∫₀ˣ exp(−t²) dt, from a table of Taylor polynomials (see erf-table.ts).
 * Absolute error below 3e-16; beyond |x| = 6, where 1 − erf(x) < 2.2e-17, it is ±1. */
import { erfCells, erfTable, erfTerms } from "./erf-table";

export function erf(x: f64): f64 {
  const size = abs(x);
  const cell = <i32>(size * 4.0);
  if (!(size * 4.0 < <f64>erfCells)) return size == size ? copysign<f64>(1.0, x) : x;
  const h = size - (<f64>cell + 0.5) * 0.25;
  const first = changetype<usize>(erfTable) + ((<usize>(cell * erfTerms)) << 3);
  // Even and odd powers side by side, each by Horner's rule in h².
  const square = f64x2.splat(h * h);
  let sums = v128.load(first + ((<usize>(erfTerms - 2)) << 3));
  for (let n = erfTerms - 4; n >= 0; n -= 2) {
    sums = f64x2.add(f64x2.mul(sums, square), v128.load(first + ((<usize>n) << 3)));
  }
  return copysign<f64>(f64x2.extract_lane(sums, 0) + h * f64x2.extract_lane(sums, 1), x);
}
