/** What a round of an extraction is made of, for all fibres or for a stretch of them whose neighbours stand still;
 * src/reference/rounds.ts is the same for one column. */
import { boxcar } from "./boxcar";
import { callFibre, chunkFibres, chunkMargin } from "./chunks";
import { confront } from "./cosmic";
import { solveCrosstalk, withoutCrosstalk } from "./crosstalk";
import { count, laneRows, MethodCode, pointer, Word, windowLaneRow, windowOffset, windowRows } from "./job";
import { jointCovariance, normalEquations, solveNormal } from "./joint";
import { spread } from "./lanes";
import { addLight, addWindowLight, addWingLight } from "./light";
import { optimal } from "./optimal";

/** Change of a flux, in units of the σ it would have alone, up to which it has settled. */
const settledSigma: f64 = 0.1;

/** Word.solution into Word.fluxes, in the lanes of `mask`; by how much each flux changed stays in Word.lastChange, and
 * fibres that moved by more than a tenth of their σ are called when `call`ing. */
export function takeSolution<T extends number>(job: usize, k0: i32, k1: i32, mask: v128, call: bool): void {
  const fluxes = pointer(job, Word.fluxes);
  const solution = pointer(job, Word.solution);
  const lastChange = pointer(job, Word.lastChange);
  const rowBytes = (<usize>(count(job, Word.bandwidth) + 1)) << 4;
  const limit = spread<T>(settledSigma * settledSigma);
  let normal = pointer(job, Word.normal) + <usize>k0 * rowBytes;
  for (let k = k0; k < k1; k++) {
    const at = (<usize>k) << 4;
    const before = v128.load(fluxes + at);
    const fresh = v128.load(solution + at);
    const change = v128.sub<T>(fresh, before);
    v128.store(fluxes + at, v128.bitselect(fresh, before, mask));
    v128.store(lastChange + at, v128.bitselect(change, v128.load(lastChange + at), mask));
    if (call) {
      const squared = v128.mul<T>(v128.mul<T>(change, change), v128.load(normal));
      const moved = v128.and(mask, v128.gt<T>(squared, limit));
      if (v128.any_true(moved)) callFibre(job, k, moved);
    }
    normal += rowBytes;
  }
}

/** The wings of every fibre whose flux just changed by more than a tenth of its σ. */
export function moveWings<T extends number>(job: usize): void {
  const rowBytes = (<usize>(count(job, Word.bandwidth) + 1)) << 4;
  const limit = spread<T>(settledSigma * settledSigma);
  for (let k: i32 = 0; k < count(job, Word.nFibre); k++) {
    const change = v128.load(pointer(job, Word.lastChange) + ((<usize>k) << 4));
    const squared = v128.mul<T>(
      v128.mul<T>(change, change),
      v128.load(pointer(job, Word.normal) + <usize>k * rowBytes),
    );
    const moved = v128.gt<T>(squared, limit);
    if (v128.any_true(moved)) addWingLight<T>(job, k, windowOffset(job, k), v128.and(change, moved));
  }
}

/** All light anew from Word.fluxes; the wings' only when asked for. */
export function lightAfresh<T extends number>(job: usize, wings: bool): void {
  const bytes = (<usize>laneRows(job)) << 4;
  memory.fill(pointer(job, Word.model), 0, bytes);
  if (wings) memory.fill(pointer(job, Word.wingLight), 0, bytes);
  addLight<T>(job, 0, count(job, Word.nFibre), wings);
}

/** Another round for one chunk and its margin in `lanes`: variances, fit, light, and what that leaves. */
export function settleChunk<T extends number>(job: usize, chunk: i32, lanes: v128, rejecting: bool, mark: bool): void {
  const nFibre = count(job, Word.nFibre);
  const k0 = max(chunk * chunkFibres - chunkMargin(job), 0);
  const k1 = min((chunk + 1) * chunkFibres + chunkMargin(job), nFibre);
  settleStretch<T>(job, k0, k1, 0, nFibre, lanes);
  const row0 = windowLaneRow(job, k0);
  const row1 = windowLaneRow(job, k1 - 1) + windowRows(job);
  confront<T>(job, row0, row1, lanes, rejecting, mark, false);
}

/** Fibres k0 … k1 − 1 anew in `lanes` while the others stand still. Of the fibres only `lowest` … `highest` − 1 are known. */
export function settleStretch<T extends number>(
  job: usize,
  k0: i32,
  k1: i32,
  lowest: i32,
  highest: i32,
  lanes: v128,
): void {
  const bandwidth = count(job, Word.bandwidth);
  const row0 = windowLaneRow(job, k0);
  const row1 = windowLaneRow(job, k1 - 1) + windowRows(job);
  confront<T>(job, row0, row1, lanes, false, false, true);
  // Every fibre that sees one of these rows, so that the equations always belong to the variances as they are.
  normalEquations<T>(job, max(k0 - bandwidth, lowest), min(k1 + bandwidth, highest), lowest, false);
  solveNormal<T>(job, k0, k1);
  const fluxes = pointer(job, Word.fluxes);
  const before = pointer(job, Word.covariancesBelow); // free until the estimate
  memory.copy(before + ((<usize>k0) << 4), fluxes + ((<usize>k0) << 4), (<usize>(k1 - k0)) << 4);
  takeSolution<T>(job, k0, k1, lanes, true);
  const windowBytes = (<usize>windowRows(job)) << 4;
  for (let k = k0; k < k1; k++) {
    const at = (<usize>k) << 4;
    const change = v128.sub<T>(v128.load(fluxes + at), v128.load(before + at));
    const first = windowOffset(job, k);
    const weights = pointer(job, Word.weights) + <usize>k * windowBytes;
    addWindowLight<T>(pointer(job, Word.model) + first, weights, windowBytes, change);
    addWingLight<T>(job, k, first, change);
  }
}

export function estimate<T extends number>(job: usize, k0: i32, k1: i32): void {
  const method = count(job, Word.method);
  if (method == MethodCode.joint) {
    jointCovariance<T>(job, k0, k1);
    return;
  }
  if (method == MethodCode.optimal) optimal<T>(job, k0, k1);
  else boxcar<T>(job, k0, k1);
  if (count(job, Word.crosstalk)) solveCrosstalk<T>(job, k0, k1);
  else withoutCrosstalk<T>(job, k0, k1);
}
