import { LegendreWord } from "../src/kernels/legendre-words";
import { lanesSet } from "./lanes";
import { median } from "./median";
import { count, pointer } from "./words";

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

function ofPair(job: usize, word: LegendreWord, pair: i32, nEntry: i32): usize {
  return pointer(job, word) + ((<usize>pair * <usize>nEntry) << 4);
}

/** P_0(t) … P_{nCoef−1}(t) of every point; to be called once for all series on the same points. */
export function legendreBases(job: usize): void {
  const nCoef = count(job, LegendreWord.nCoef);
  let out = pointer(job, LegendreWord.basis);
  for (let i: usize = 0; i < <usize>count(job, LegendreWord.nPoint); i++) {
    legendreBasis(load<f64>(pointer(job, LegendreWord.t) + (i << 3)), nCoef, out);
    out += (<usize>nCoef) << 3;
  }
}

/** One pair of weighted least squares for y(t) = Σ c_j P_j(t), with points beyond `kappa` scatters left out in turns; the
 * scatter is 1.4826 × the median of |residual| · √weight over the points in use, so that outliers cannot hide themselves.
 * Through the normal equations in the Legendre basis (well conditioned on [−1, 1]) and rounds of refinement on the residuals.
 * A coefficient that the points do not fix comes out as 0. A lane that has settled keeps its numbers. */
export function legendreFits(job: usize, pair: i32): void {
  const n = count(job, LegendreWord.nPoint);
  const nCoef = count(job, LegendreWord.nCoef);
  const maxRounds = count(job, LegendreWord.maxRounds);
  const kappa = load<f64>(pointer(job, LegendreWord.kappa));
  const weight = ofPair(job, LegendreWord.weight, pair, n);
  const given = pointer(job, LegendreWord.given);
  let isActive = i64x2.splat(-1);
  memory.copy(given, weight, (<usize>n) << 4);
  memory.fill(ofPair(job, LegendreWord.coef, pair, nCoef), 0, (<usize>nCoef) << 4);
  for (let round = 0; ; round++) {
    accumulate(job, weight);
    cholesky(pointer(job, LegendreWord.normal), nCoef);
    for (let turn = round == 0 ? 0 : 1; turn < 3; turn++) improve(job, pair, isActive);
    if (round == maxRounds) return;
    scaledResiduals(job, pair);
    const both = lanesSet<f64>(isActive);
    const low: i64 = (both & 1) != 0 && clip(job, weight, 0, kappa) ? -1 : 0;
    const high: i64 = (both & 2) != 0 && clip(job, weight, 8, kappa) ? -1 : 0;
    if (low == 0 && high == 0) return;
    isActive = i64x2(low, high);
  }
}

/** Leaves out one lane's points beyond `kappa` scatters; whether that changed anything. */
function clip(job: usize, weight: usize, lane: usize, kappa: f64): bool {
  const end = (<usize>count(job, LegendreWord.nPoint)) << 4;
  const residual = pointer(job, LegendreWord.residual) + lane;
  const given = pointer(job, LegendreWord.given) + lane;
  const sorted = pointer(job, LegendreWord.sorted);
  let nUsed = 0;
  for (let at: usize = 0; at < end; at += 16) {
    if (load<f64>(weight + lane + at) == 0) continue;
    store<f64>(sorted + ((<usize>nUsed) << 3), load<f64>(residual + at));
    nUsed++;
  }
  if (nUsed <= count(job, LegendreWord.nCoef)) return false;
  const limit = kappa * 1.4826 * median(sorted, nUsed);
  let changed = false;
  for (let at: usize = 0; at < end; at += 16) {
    const next: f64 = load<f64>(residual + at) <= limit ? load<f64>(given + at) : 0;
    if (next != load<f64>(weight + lane + at)) changed = true;
    store<f64>(weight + lane + at, next);
  }
  return changed;
}

/** Σ c_j P_j of the point whose basis lies at `basis`. */
function seriesAt(basis: usize, coef: usize, nCoef: i32): v128 {
  let sum = f64x2.splat(0);
  for (let j: usize = 0; j < <usize>nCoef; j++) {
    sum = f64x2.add(sum, f64x2.mul(v128.load(coef + (j << 4)), v128.load64_splat(basis + (j << 3))));
  }
  return sum;
}

/** |y − y(t)| · √weight of every point, left out or not. */
function scaledResiduals(job: usize, pair: i32): void {
  const n = count(job, LegendreWord.nPoint);
  const nCoef = count(job, LegendreWord.nCoef);
  const coef = ofPair(job, LegendreWord.coef, pair, nCoef);
  const y = ofPair(job, LegendreWord.y, pair, n);
  let basis = pointer(job, LegendreWord.basis);
  for (let at: usize = 0; at < (<usize>n) << 4; at += 16) {
    const residual = f64x2.abs(f64x2.sub(v128.load(y + at), seriesAt(basis, coef, nCoef)));
    const root = f64x2.sqrt(v128.load(pointer(job, LegendreWord.given) + at));
    v128.store(pointer(job, LegendreWord.residual) + at, f64x2.mul(residual, root));
    basis += (<usize>nCoef) << 3;
  }
}

/** Adds to the coefficients what the residuals still hold of each term. */
function improve(job: usize, pair: i32, isActive: v128): void {
  const n = count(job, LegendreWord.nPoint);
  const nCoef = count(job, LegendreWord.nCoef);
  const coef = ofPair(job, LegendreWord.coef, pair, nCoef);
  const y = ofPair(job, LegendreWord.y, pair, n);
  const weight = ofPair(job, LegendreWord.weight, pair, n);
  const side = pointer(job, LegendreWord.side);
  const coefBytes = (<usize>nCoef) << 4;
  let basis = pointer(job, LegendreWord.basis);
  memory.fill(side, 0, coefBytes);
  for (let at: usize = 0; at < (<usize>n) << 4; at += 16) {
    const residual = f64x2.sub(v128.load(y + at), seriesAt(basis, coef, nCoef));
    const weighted = f64x2.mul(v128.load(weight + at), residual);
    for (let j: usize = 0; j < coefBytes; j += 16) {
      const part = f64x2.mul(weighted, v128.load64_splat(basis));
      v128.store(side + j, f64x2.add(v128.load(side + j), part));
      basis += 8;
    }
  }
  choleskySolve(pointer(job, LegendreWord.normal), nCoef, side);
  for (let j: usize = 0; j < coefBytes; j += 16) {
    v128.store(coef + j, f64x2.add(v128.load(coef + j), v128.and(v128.load(side + j), isActive)));
  }
}

/** P_0(t) … P_{nCoef−1}(t). */
export function legendreBasis(t: f64, nCoef: i32, basisPtr: usize): void {
  let below: f64 = 1.0;
  let here: f64 = t;
  store<f64>(basisPtr, 1.0);
  for (let j: i32 = 1; j < nCoef; j++) {
    store<f64>(basisPtr + ((<usize>j) << 3), here);
    const above: f64 = (<f64>(2 * j + 1) * t * here - <f64>j * below) / <f64>(j + 1);
    below = here;
    here = above;
  }
}

/** Lower triangle of Σ weight · P_i P_j. */
function accumulate(job: usize, weight: usize): void {
  const n = count(job, LegendreWord.nPoint);
  const nCoef = count(job, LegendreWord.nCoef);
  const normal = pointer(job, LegendreWord.normal);
  let basis = pointer(job, LegendreWord.basis);
  memory.fill(normal, 0, (<usize>(nCoef * nCoef)) << 4);
  for (let k: usize = 0; k < <usize>n; k++) {
    const w = v128.load(weight + (k << 4));
    for (let i: i32 = 0; i < nCoef; i++) {
      const weighted = f64x2.mul(w, v128.load64_splat(basis + ((<usize>i) << 3)));
      let at = normal + ((<usize>(i * nCoef)) << 4);
      for (let j: i32 = 0; j <= i; j++) {
        const part = f64x2.mul(weighted, v128.load64_splat(basis + ((<usize>j) << 3)));
        v128.store(at, f64x2.add(v128.load(at), part));
        at += 16;
      }
    }
    basis += (<usize>nCoef) << 3;
  }
}

/** Lower triangle overwritten by its Cholesky factor, 1 over its diagonal; a pivot lost in rounding becomes 0 and drops its
 * unknown. */
function cholesky(ptr: usize, n: i32): void {
  for (let i: i32 = 0; i < n; i++) {
    const row = ptr + ((<usize>(i * n)) << 4);
    const diagonal = v128.load(row + ((<usize>i) << 4));
    for (let j: i32 = 0; j <= i; j++) {
      const other = ptr + ((<usize>(j * n)) << 4);
      let sum = v128.load(row + ((<usize>j) << 4));
      for (let k: usize = 0; k < (<usize>j) << 4; k += 16) {
        sum = f64x2.sub(sum, f64x2.mul(v128.load(row + k), v128.load(other + k)));
      }
      if (j < i) {
        v128.store(row + ((<usize>j) << 4), f64x2.mul(sum, v128.load(other + ((<usize>j) << 4))));
        continue;
      }
      const kept = f64x2.gt(sum, f64x2.mul(f64x2.splat(1e-13), diagonal));
      v128.store(row + ((<usize>i) << 4), v128.and(f64x2.div(f64x2.splat(1), f64x2.sqrt(sum)), kept));
    }
  }
}

function choleskySolve(ptr: usize, n: i32, side: usize): void {
  for (let i: i32 = 0; i < n; i++) {
    const row = ptr + ((<usize>(i * n)) << 4);
    const at = (<usize>i) << 4;
    let sum = v128.load(side + at);
    for (let k: usize = 0; k < at; k += 16) {
      sum = f64x2.sub(sum, f64x2.mul(v128.load(row + k), v128.load(side + k)));
    }
    v128.store(side + at, f64x2.mul(sum, v128.load(row + at)));
  }
  for (let i: i32 = n - 1; i >= 0; i--) {
    const at = (<usize>i) << 4;
    let sum = v128.load(side + at);
    for (let k: i32 = i + 1; k < n; k++) {
      const below = v128.load(ptr + ((<usize>(k * n + i)) << 4));
      sum = f64x2.sub(sum, f64x2.mul(below, v128.load(side + ((<usize>k) << 4))));
    }
    v128.store(side + at, f64x2.mul(sum, v128.load(ptr + ((<usize>(i * n + i)) << 4))));
  }
}
