/** erf where many values are wanted and few digits: polynomials on cells so narrow that few terms do, laid down once a job.
 *
 *     cell:   c0 c1 | c2 c3 | … | c6 c7      powers of the distance from the cell's middle, two to a v128
 *
 * The distance is 1/64 at the most, and no coefficient of erf beyond the first two exceeds 0.38: what is left out is below 1e-15 of
 * eight terms (f64) and below 2e-8 of four (f32), which rounding alone exceeds. */
import { erf } from "./erf";
import { exp } from "./exp";

/** Cells on [0, 6]; src/kernels/extractionMemory.ts makes room for as many. */
export const nErfCell: i32 = 192;
const perUnit: f64 = 32.0;
const nTerm: i32 = 8;
const twoOverRootPi: f64 = 1.1283791670955126;

/** `table`: nErfCell × 8 f64. With erf′ = Σ aₙ hⁿ about x, erf″ = −2x·erf′ gives (n+1)·aₙ₊₁ = −2(x·aₙ + aₙ₋₁). */
export function prepareErfCells(table: usize): void {
  for (let cell: i32 = 0; cell < nErfCell; cell++) {
    const x: f64 = (<f64>cell + 0.5) / perUnit;
    let before: f64 = 0.0;
    let slope: f64 = twoOverRootPi * exp(-x * x);
    store<f64>(table, erf(x));
    for (let n: i32 = 1; n < nTerm; n++) {
      store<f64>(table + ((<usize>n) << 3), slope / <f64>n);
      const next: f64 = (-2.0 * (x * slope + before)) / <f64>n;
      before = slope;
      slope = next;
    }
    table += (<usize>nTerm) << 3;
  }
}

/** erf(x), to what T holds of it. */
export function erfInCells<T extends number>(table: usize, x: f64): f64 {
  const at = abs(x) * perUnit;
  if (!(at < <f64>nErfCell)) return copysign<f64>(1.0, x);
  const cell = <i32>at;
  const h = (at - <f64>cell - 0.5) * (1.0 / perUnit);
  const first = table + ((<usize>cell) << 6);
  const square = f64x2.splat(h * h);
  let sums = v128.load(first, 16);
  if (sizeof<T>() == 8) {
    const high = f64x2.add(v128.load(first, 32), f64x2.mul(square, v128.load(first, 48)));
    sums = f64x2.add(sums, f64x2.mul(square, high));
  }
  sums = f64x2.add(v128.load(first), f64x2.mul(square, sums));
  return copysign<f64>(f64x2.extract_lane(sums, 0) + h * f64x2.extract_lane(sums, 1), x);
}
