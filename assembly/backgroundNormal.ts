/** Normal equations of a background Σ β_j P_j(y) in a group of columns, with the fibres' fluxes eliminated (Schur complement):
 *
 *     M_jl = P_jᵀ W P_l − g_jᵀ N⁻¹ g_l,   r_j = P_jᵀ W r,   g_j = Aᵀ W P_j,   N = Aᵀ W A
 *
 * so that light which a fibre could hold as well counts for nothing; r is what fitted fluxes leave, Aᵀ W r = 0. src/reference/backgroundNormal.ts is the same for one
 * column. Needs the factors of N that the last round left. */
import { ColumnWord } from "../src/kernels/columnFit-words";
import { solveBand } from "./banded";
import { coreOffset, count, frameRows, pointer, windowOffset } from "./columnFit";
import { spread } from "./lanes";

export function backgroundNormal(job: usize, group: i32): void {
  const nY = count(job, ColumnWord.nY);
  const nFibre = count(job, ColumnWord.nFibre);
  const bytes = (<usize>nFibre) << 4;
  const projected = pointer(job, ColumnWord.projected);
  const solved = pointer(job, ColumnWord.solved);
  for (let k: i32 = 0; k < nFibre; k++) projectFibre(job, k, nY, bytes);
  memory.copy(solved, projected, <usize>nY * bytes);
  for (let j: usize = 0; j < <usize>nY; j++) {
    solveBand<f32>(pointer(job, ColumnWord.band), nFibre, count(job, ColumnWord.bandwidth), solved + j * bytes);
  }
  const nNumber = (nY * (nY + 3)) >> 1;
  const out = pointer(job, ColumnWord.normal) + ((<usize>(group * nNumber)) << 4);
  sumRows(job, nY, out);
  let at = out;
  for (let j: usize = 0; j < <usize>nY; j++) {
    for (let l: usize = 0; l <= j; l++) {
      v128.store(at, f32x4.sub(v128.load(at), product(projected + l * bytes, solved + j * bytes, bytes)));
      at += 16;
    }
  }
}

/** g_j of fibre k for every order. */
function projectFibre(job: usize, k: i32, nY: i32, bytes: usize): void {
  const coreBytes = (<usize>count(job, ColumnWord.nCore)) << 4;
  const core = coreOffset(job);
  const own = pointer(job, ColumnWord.weights) + ((<usize>k * <usize>count(job, ColumnWord.nWindow)) << 4) + core;
  const rows = windowOffset(job, k) + core;
  const weighted = pointer(job, ColumnWord.weighted);
  for (let at: usize = 0; at < coreBytes; at += 16) {
    const u = f32x4.mul(v128.load(own + at), v128.load(pointer(job, ColumnWord.inverseVariance) + rows + at));
    v128.store(weighted + at, u);
  }
  // Rows of the core that lie on the frame.
  const start = load<i32>(pointer(job, ColumnWord.start) + ((<usize>k) << 2)) + <i32>(core >> 4);
  const from = max(0, -start);
  const to = min(count(job, ColumnWord.nCore), count(job, ColumnWord.ny) - start);
  for (let j: i32 = 0; j < nY; j++) {
    let sum = spread<f32>(0);
    let p = pointer(job, ColumnWord.rowPolynomials) + ((<usize>((start + from) * nY + j)) << 2);
    for (let i = from; i < to; i++) {
      sum = f32x4.add(sum, f32x4.mul(v128.load(weighted + ((<usize>i) << 4)), v128.load32_splat(p)));
      p += (<usize>nY) << 2;
    }
    v128.store(pointer(job, ColumnWord.projected) + <usize>j * bytes + ((<usize>k) << 4), sum);
  }
}

/** P_jᵀ W P_l and P_jᵀ W r over all rows. */
function sumRows(job: usize, nY: i32, out: usize): void {
  memory.fill(out, 0, (<usize>((nY * (nY + 3)) >> 1)) << 4);
  const ivar = frameRows(job, ColumnWord.inverseVariance);
  const rest = frameRows(job, ColumnWord.rest);
  const rhs = out + ((<usize>((nY * (nY + 1)) >> 1)) << 4);
  let polynomials = pointer(job, ColumnWord.rowPolynomials);
  for (let row: usize = 0; row < (<usize>count(job, ColumnWord.ny)) << 4; row += 16) {
    const w = v128.load(ivar + row);
    const r = v128.load(rest + row);
    let at = out;
    for (let j: usize = 0; j < (<usize>nY) << 2; j += 4) {
      const wp = f32x4.mul(w, v128.load32_splat(polynomials + j));
      for (let l: usize = 0; l <= j; l += 4) {
        v128.store(at, f32x4.add(v128.load(at), f32x4.mul(wp, v128.load32_splat(polynomials + l))));
        at += 16;
      }
      const to = rhs + (j << 2);
      v128.store(to, f32x4.add(v128.load(to), f32x4.mul(wp, r)));
    }
    polynomials += (<usize>nY) << 2;
  }
}

function product(a: usize, b: usize, bytes: usize): v128 {
  let sum = spread<f32>(0);
  for (let at: usize = 0; at < bytes; at += 16) {
    sum = f32x4.add(sum, f32x4.mul(v128.load(a + at), v128.load(b + at)));
  }
  return sum;
}
