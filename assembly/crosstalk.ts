/** Cross-talk taken back, in lanes: solves C f = f_raw with covariance C⁻¹VC⁻ᵀ through one interleaved symmetric
 * system; src/reference/crosstalk.ts derives it. */
import { factorBand, inverseBand, solveBand } from "./banded";
import { count, pointer, Word } from "./job";
import { leastShare } from "./joint";
import { spread } from "./lanes";

/** Fluxes, variances and covariances of fibres k0 … k1 − 1 from Word.raw, Word.crosstalkBand and Word.rawCovariance. */
export function solveCrosstalk<T extends number>(job: usize, k0: i32, k1: i32): void {
  const n = k1 - k0;
  const bandwidth = count(job, Word.bandwidth);
  const half = 2 * bandwidth + 1;
  const system = pointer(job, Word.system);
  const inverse = pointer(job, Word.systemInverse);
  const rhs = pointer(job, Word.systemRhs);
  interleave<T>(job, k0, k1);
  factorBand<T>(system, 2 * n, half);
  for (let k: i32 = 0; k < n; k++) {
    v128.store(rhs + ((<usize>k) << 5), v128.load(pointer(job, Word.raw) + ((<usize>(k0 + k)) << 4)));
    v128.store(rhs + ((<usize>k) << 5), spread<T>(0), 16);
  }
  solveBand<T>(system, 2 * n, half, rhs);
  inverseBand<T>(system, 2 * n, half, inverse);
  for (let k: i32 = 0; k < n; k++) {
    const at = (<usize>(k0 + k)) << 4;
    const row = inverse + ((<usize>(2 * k + 1) * <usize>(half + 1)) << 4);
    const pair = k > 0 && bandwidth > 0;
    v128.store(pointer(job, Word.fluxes) + at, v128.load(rhs + ((<usize>k) << 5), 16));
    v128.store(pointer(job, Word.variances) + at, v128.sub<T>(spread<T>(0), v128.load(row)));
    const below = pair ? v128.sub<T>(spread<T>(0), v128.load(row, 32)) : spread<T>(0);
    v128.store(pointer(job, Word.covariancesBelow) + at, below);
  }
}

/** Each fibre for itself: f = raw / C[k][k], covariance V[k][j] / (C[k][k]·C[j][j]). */
export function withoutCrosstalk<T extends number>(job: usize, k0: i32, k1: i32): void {
  const bandwidth = count(job, Word.bandwidth);
  const rowBytes = (<usize>(bandwidth + 1)) << 4;
  for (let k = k0; k < k1; k++) {
    const at = (<usize>k) << 4;
    const own = inverseOwnShare<T>(job, k);
    const covariance = pointer(job, Word.rawCovariance) + <usize>k * rowBytes;
    v128.store(pointer(job, Word.fluxes) + at, v128.mul<T>(v128.load(pointer(job, Word.raw) + at), own));
    v128.store(pointer(job, Word.variances) + at, v128.mul<T>(v128.mul<T>(v128.load(covariance), own), own));
    let below = spread<T>(0);
    if (k > k0 && bandwidth > 0) {
      below = v128.mul<T>(v128.mul<T>(v128.load(covariance, 16), own), inverseOwnShare<T>(job, k - 1));
    }
    v128.store(pointer(job, Word.covariancesBelow) + at, below);
  }
}

/** Rows y0 x0 y1 x1 … of the symmetric system, half-bandwidth 2·bandwidth + 1; unmeasured fibres left out of C. */
function interleave<T extends number>(job: usize, k0: i32, k1: i32): void {
  const bandwidth = count(job, Word.bandwidth);
  const half = 2 * bandwidth + 1;
  const rowBytes = (<usize>(half + 1)) << 4;
  const system = pointer(job, Word.system);
  const crosstalk = pointer(job, Word.crosstalkBand);
  const covariance = pointer(job, Word.rawCovariance);
  memory.fill(system, 0, <usize>(2 * (k1 - k0)) * rowBytes);
  for (let k = k0; k < k1; k++) {
    const yRow = system + <usize>(2 * (k - k0)) * rowBytes;
    const xRow = yRow + rowBytes;
    for (let j: i32 = 0; j <= min(k - k0, bandwidth); j++) {
      const above = crosstalk + ((<usize>(k * half + bandwidth - j)) << 4);
      const below = crosstalk + ((<usize>((k - j) * half + bandwidth + j)) << 4);
      v128.store(yRow + ((<usize>(2 * j)) << 4), v128.load(covariance + ((<usize>(k * (bandwidth + 1) + j)) << 4)));
      if (j > 0) v128.store(yRow + ((<usize>(2 * j - 1)) << 4), v128.and(v128.load(above), measured<T>(job, k - j)));
      v128.store(xRow + ((<usize>(2 * j + 1)) << 4), v128.and(v128.load(below), measured<T>(job, k)));
    }
  }
}

function inverseOwnShare<T extends number>(job: usize, k: i32): v128 {
  const own = ownShare(job, k);
  return v128.and(v128.div<T>(spread<T>(1), own), v128.gt<T>(own, spread<T>(0)));
}

/** Lanes in which the estimator caught enough of fibre k's light to tell it. */
function measured<T extends number>(job: usize, k: i32): v128 {
  return v128.ge<T>(ownShare(job, k), spread<T>(leastShare));
}

function ownShare(job: usize, k: i32): v128 {
  const bandwidth = count(job, Word.bandwidth);
  return v128.load(pointer(job, Word.crosstalkBand) + ((<usize>(k * (2 * bandwidth + 1) + bandwidth)) << 4));
}
