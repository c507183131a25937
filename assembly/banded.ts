/** Symmetric banded systems, one in each lane: factorisation without square roots (A = L D Lᵀ), solution, and the
 * band of the inverse without the inverse (Takahashi, Fagan & Chen 1973; Golub & Van Loan, Matrix Computations, §4.3).
 *
 * No pivoting: right for positive matrices and for the saddle-point ones of crosstalk.ts (Vanderbei 1995,
 * SIAM J. Optim. 5, 100: quasi-definite matrices factorise in every order).
 *
 *     row i of a band with half-bandwidth b, each entry a v128:   M[i][i]  M[i][i−1]  …  M[i][i−b]
 *     after factorBand:                                           1/D[i]   L[i][i−1]  …  L[i][i−b]
 *
 * A pivot that is 0, or lost in the rounding of what it is the difference of, drops its unknown: 1/D = 0, so that the
 * unknown and its variance come out as exactly 0, and the others as if it were not there. */
import { spread } from "./lanes";

/** A pivot below this share of its terms (diagonal and what is taken from it, without signs) carries no digit. */
function smallestPivotShare<T extends number>(): f64 {
  return sizeof<T>() == 4 ? 1e-5 : 1e-8;
}

/** M = L D Lᵀ in place. `bandPtr`: n × (b+1) v128. */
export function factorBand<T extends number>(bandPtr: usize, n: i32, b: i32): void {
  const rowBytes = (<usize>(b + 1)) << 4;
  for (let i: i32 = 0; i < n; i++) factorRow<T>(bandPtr + <usize>i * rowBytes, min(i, b), rowBytes);
}

/** The row at `here`, of which `reach` neighbours before it are factored already. */
export function factorRow<T extends number>(here: usize, reach: i32, rowBytes: usize): void {
  for (let j = reach - 1; j >= 1; j--) {
    const there = here - <usize>j * rowBytes;
    let u = v128.load(here + ((<usize>j) << 4));
    for (let m = j + 1; m <= reach; m++) {
      const l = v128.load(there + ((<usize>(m - j)) << 4));
      u = v128.sub<T>(u, v128.mul<T>(v128.load(here + ((<usize>m) << 4)), l));
    }
    v128.store(here + ((<usize>j) << 4), u);
  }
  let pivot = v128.load(here);
  let size = v128.abs<T>(pivot);
  for (let j = 1; j <= reach; j++) {
    const u = v128.load(here + ((<usize>j) << 4));
    const l = v128.mul<T>(u, v128.load(here - <usize>j * rowBytes));
    const taken = v128.mul<T>(u, l);
    v128.store(here + ((<usize>j) << 4), l);
    pivot = v128.sub<T>(pivot, taken);
    size = v128.add<T>(size, v128.abs<T>(taken));
  }
  v128.store(here, inversePivot<T>(pivot, size, spread<T>(smallestPivotShare<T>())));
}

/** Solves M x = r in place of r, with the factors of `factorBand`. `rhsPtr`: n v128. */
export function solveBand<T extends number>(bandPtr: usize, n: i32, b: i32, rhsPtr: usize): void {
  const rowBytes = (<usize>(b + 1)) << 4;
  for (let i: i32 = 0; i < n; i++) {
    substituteRow<T>(bandPtr + <usize>i * rowBytes, min(i, b), rhsPtr + ((<usize>i) << 4));
  }
  substituteBack<T>(bandPtr, n, b, rhsPtr);
}

/** L y = r for the factored row at `here`, in place of its right-hand side, which stands behind those of the rows before. */
export function substituteRow<T extends number>(here: usize, reach: i32, rhsPtr: usize): void {
  let y = v128.load(rhsPtr);
  for (let j = 1; j <= reach; j++) {
    y = v128.sub<T>(y, v128.mul<T>(v128.load(here + ((<usize>j) << 4)), v128.load(rhsPtr - ((<usize>j) << 4))));
  }
  v128.store(rhsPtr, y);
}

/** D Lᵀ x = y in place of y. */
export function substituteBack<T extends number>(bandPtr: usize, n: i32, b: i32, rhsPtr: usize): void {
  const rowBytes = (<usize>(b + 1)) << 4;
  for (let i = n - 1; i >= 0; i--) {
    const x = substituteRowBack<T>(
      bandPtr + <usize>i * rowBytes,
      min(n - 1 - i, b),
      rowBytes,
      rhsPtr + ((<usize>i) << 4),
    );
    v128.store(rhsPtr + ((<usize>i) << 4), x);
  }
}

/** The unknown at `at`, whose row of the band is at `here`, of which `reach` unknowns behind it are solved already. */
export function substituteRowBack<T extends number>(here: usize, reach: i32, rowBytes: usize, at: usize): v128 {
  let x = v128.mul<T>(v128.load(at), v128.load(here));
  for (let j = reach; j >= 1; j--) {
    const l = v128.load(here + <usize>j * rowBytes + ((<usize>j) << 4));
    x = v128.sub<T>(x, v128.mul<T>(l, v128.load(at + ((<usize>j) << 4))));
  }
  return x;
}

/** `solveBand` for several right-hand sides at once, `rhsPtr`: n × nSide v128, [unknown][side]. The sides do not wait for each
 * other, and what was solved long ago is taken off first, so that little waits for what was solved last. */
export function solveBandSides<T extends number>(bandPtr: usize, n: i32, b: i32, rhsPtr: usize, nSide: i32): void {
  const rowBytes = (<usize>(b + 1)) << 4;
  const sideBytes = (<usize>nSide) << 4;
  for (let i: i32 = 0; i < n; i++) {
    const here = bandPtr + <usize>i * rowBytes;
    const end = rhsPtr + <usize>(i + 1) * sideBytes;
    for (let at = end - sideBytes; at < end; at += 16) {
      let y = v128.load(at);
      for (let j = min(i, b); j >= 1; j--) {
        y = v128.sub<T>(y, v128.mul<T>(v128.load(here + ((<usize>j) << 4)), v128.load(at - <usize>j * sideBytes)));
      }
      v128.store(at, y);
    }
  }
  for (let i = n - 1; i >= 0; i--) {
    const here = bandPtr + <usize>i * rowBytes;
    const end = rhsPtr + <usize>(i + 1) * sideBytes;
    for (let at = end - sideBytes; at < end; at += 16) {
      let x = v128.mul<T>(v128.load(at), v128.load(here));
      for (let j = min(n - 1 - i, b); j >= 1; j--) {
        const l = v128.load(here + <usize>j * rowBytes + ((<usize>j) << 4));
        x = v128.sub<T>(x, v128.mul<T>(l, v128.load(at + <usize>j * sideBytes)));
      }
      v128.store(at, x);
    }
  }
}

/** The band of M⁻¹ from the factors of `factorBand`, in the same layout. `inversePtr`: n × (b+1) v128. */
export function inverseBand<T extends number>(bandPtr: usize, n: i32, b: i32, inversePtr: usize): void {
  const rowBytes = (<usize>(b + 1)) << 4;
  for (let i = n - 1; i >= 0; i--) {
    const reach = min(n - 1 - i, b);
    for (let j = reach; j >= 0; j--) {
      let sum = j == 0 ? v128.load(bandPtr + <usize>i * rowBytes) : spread<T>(0);
      for (let k = 1; k <= reach; k++) {
        const l = v128.load(bandPtr + <usize>(i + k) * rowBytes + ((<usize>k) << 4));
        const low = max(k, j);
        const s = v128.load(inversePtr + <usize>(i + low) * rowBytes + ((<usize>(low - min(k, j))) << 4));
        sum = v128.sub<T>(sum, v128.mul<T>(l, s));
      }
      v128.store(inversePtr + <usize>(i + j) * rowBytes + ((<usize>j) << 4), sum);
    }
  }
}

function inversePivot<T extends number>(pivot: v128, size: v128, share: v128): v128 {
  const kept = v128.gt<T>(v128.abs<T>(pivot), v128.mul<T>(size, share));
  return v128.and(v128.div<T>(spread<T>(1), pivot), kept);
}

/** Factor, solve and invert in one call, for the door: f32 lanes. */
export function bandedSystems32(bandPtr: usize, n: i32, b: i32, rhsPtr: usize, inversePtr: usize): void {
  bandedSystems<f32>(bandPtr, n, b, rhsPtr, inversePtr);
}

/** Factor, solve and invert in one call, for the door: f64 lanes. */
export function bandedSystems64(bandPtr: usize, n: i32, b: i32, rhsPtr: usize, inversePtr: usize): void {
  bandedSystems<f64>(bandPtr, n, b, rhsPtr, inversePtr);
}

function bandedSystems<T extends number>(bandPtr: usize, n: i32, b: i32, rhsPtr: usize, inversePtr: usize): void {
  factorBand<T>(bandPtr, n, b);
  inverseBand<T>(bandPtr, n, b, inversePtr);
  solveBand<T>(bandPtr, n, b, rhsPtr);
}
