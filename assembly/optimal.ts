/** Optimal extraction of each fibre alone (Horne 1986), in lanes; src/reference/optimal.ts tells how the normal
 * equations hold all it needs: W = D⁻¹AᵀN⁻¹, C = D⁻¹M, V = D⁻¹MD⁻¹. */
import { count, pointer, Word } from "./job";
import { spread } from "./lanes";

/** Fills Word.raw, Word.crosstalkBand and Word.rawCovariance of fibres k0 … k1 − 1; Word.raw held the right-hand side before. */
export function optimal<T extends number>(job: usize, k0: i32, k1: i32): void {
  const n = <usize>(k1 - k0);
  const bandwidth = count(job, Word.bandwidth);
  const rowBytes = (<usize>(bandwidth + 1)) << 4;
  const fullBytes = (<usize>(2 * bandwidth + 1)) << 4;
  const middle = (<usize>bandwidth) << 4;
  const normal = pointer(job, Word.normal);
  const crosstalk = pointer(job, Word.crosstalkBand);
  const covariance = pointer(job, Word.rawCovariance);
  memory.fill(crosstalk + <usize>k0 * fullBytes, 0, n * fullBytes);
  memory.fill(covariance + <usize>k0 * rowBytes, 0, n * rowBytes);
  for (let k = k0; k < k1; k++) {
    const own = inverseDiagonal<T>(normal + <usize>k * rowBytes);
    const rawAt = pointer(job, Word.raw) + ((<usize>k) << 4);
    v128.store(rawAt, v128.mul<T>(v128.load(rawAt), own));
    for (let j: i32 = 0; j <= min(k - k0, bandwidth); j++) {
      const step = (<usize>j) << 4;
      const m = v128.load(normal + <usize>k * rowBytes + step);
      const other = inverseDiagonal<T>(normal + <usize>(k - j) * rowBytes);
      v128.store(crosstalk + <usize>k * fullBytes + middle - step, v128.mul<T>(m, own));
      v128.store(crosstalk + <usize>(k - j) * fullBytes + middle + step, v128.mul<T>(m, other));
      v128.store(covariance + <usize>k * rowBytes + step, v128.mul<T>(v128.mul<T>(m, own), other));
    }
  }
}

function inverseDiagonal<T extends number>(ptr: usize): v128 {
  const diagonal = v128.load(ptr);
  return v128.and(v128.div<T>(spread<T>(1), diagonal), v128.gt<T>(diagonal, spread<T>(0)));
}
