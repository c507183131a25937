/** What a round of an extraction is made of, for all fibres or for a stretch of them whose neighbours stand still;
 * src/reference/rounds.ts is the same for one column. */
import { substituteRowBack } from "./banded";
import { boxcar } from "./boxcar";
import { callFibre, chunkFibres, chunkMargin } from "./chunks";
import { confront } from "./cosmic";
import { solveCrosstalk, withoutCrosstalk } from "./crosstalk";
import {
  count,
  laneRows,
  MethodCode,
  pointer,
  Word,
  windowLaneRow,
  windowOffset,
  windowRows,
  windowWeights,
} from "./job";
import { jointCovariance, normalEquations, solveNormal } from "./joint";
import { spread } from "./lanes";
import { addWindowLight, addWingLight } from "./light";
import { optimal } from "./optimal";

/** Change of a flux, in units of the σ it would have alone, up to which it has settled. */
const settledSigma: f64 = 0.1;

/** Fluxes of all fibres from the factors that `normalEquations` left, and their light anew; the wings' only when asked for. By
 * how much each flux changed stays in Word.lastChange; with `call`, fibres that moved by more than a tenth of their σ are called.
 * Each flux is put to use as it comes: the chain from one to the next runs beside the sums. */
export function finishSolution<T extends number>(job: usize, call: bool, wings: bool): void {
  const nFibre = count(job, Word.nFibre);
  const bandwidth = count(job, Word.bandwidth);
  const rowBytes = (<usize>(bandwidth + 1)) << 4;
  const windowBytes = (<usize>windowRows(job)) << 4;
  const rowsBytes = (<usize>laneRows(job)) << 4;
  const band = pointer(job, Word.band);
  const solution = pointer(job, Word.solution);
  const model = pointer(job, Word.model);
  const everyLane = i32x4.splat(-1);
  memory.fill(model, 0, rowsBytes);
  if (wings) memory.fill(pointer(job, Word.wingLight), 0, rowsBytes);
  for (let k = nFibre - 1; k >= 0; k--) {
    const at = (<usize>k) << 4;
    const reach = min(nFibre - 1 - k, bandwidth);
    const flux = substituteRowBack<T>(band + <usize>k * rowBytes, reach, rowBytes, solution + at);
    v128.store(solution + at, flux);
    takeFlux<T>(job, k, flux, everyLane, call);
    const first = windowOffset(job, k);
    addWindowLight<T>(model + first, windowWeights(job, k), windowBytes, flux);
    if (wings) addWingLight<T>(job, k, first, flux);
  }
}

/** Word.solution into Word.fluxes, in the lanes of `mask`; changes and calls as above. */
function takeSolution<T extends number>(job: usize, k0: i32, k1: i32, mask: v128): void {
  for (let k = k0; k < k1; k++) {
    takeFlux<T>(job, k, v128.load(pointer(job, Word.solution) + ((<usize>k) << 4)), mask, true);
  }
}

function takeFlux<T extends number>(job: usize, k: i32, fresh: v128, mask: v128, call: bool): void {
  const at = (<usize>k) << 4;
  const fluxAt = pointer(job, Word.fluxes) + at;
  const changeAt = pointer(job, Word.lastChange) + at;
  const before = v128.load(fluxAt);
  const change = v128.sub<T>(fresh, before);
  v128.store(fluxAt, v128.bitselect(fresh, before, mask));
  v128.store(changeAt, v128.bitselect(change, v128.load(changeAt), mask));
  if (!call) return;
  const moved = v128.and(mask, hasMoved<T>(job, k, change));
  if (v128.any_true(moved)) callFibre(job, k, moved);
}

/** Lanes in which `change` is over a tenth of the σ that fibre k's flux would have alone. */
function hasMoved<T extends number>(job: usize, k: i32, change: v128): v128 {
  const normal = pointer(job, Word.normal) + ((<usize>(k * (count(job, Word.bandwidth) + 1))) << 4);
  const squared = v128.mul<T>(v128.mul<T>(change, change), v128.load(normal));
  return v128.gt<T>(squared, spread<T>(settledSigma * settledSigma));
}

/** The wings of every fibre whose flux just changed by more than a tenth of its σ. */
export function moveWings<T extends number>(job: usize): void {
  for (let k: i32 = 0; k < count(job, Word.nFibre); k++) {
    const change = v128.load(pointer(job, Word.lastChange) + ((<usize>k) << 4));
    const moved = hasMoved<T>(job, k, change);
    if (v128.any_true(moved)) addWingLight<T>(job, k, windowOffset(job, k), v128.and(change, moved));
  }
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
  takeSolution<T>(job, k0, k1, lanes);
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

/** `factored`: whether Word.band holds the factors of Word.normal as it stands. */
export function estimate<T extends number>(job: usize, k0: i32, k1: i32, factored: bool): void {
  const method = count(job, Word.method);
  if (method == MethodCode.joint) {
    jointCovariance<T>(job, k0, k1, factored);
    return;
  }
  if (method == MethodCode.optimal) optimal<T>(job, k0, k1);
  else boxcar<T>(job, k0, k1);
  if (count(job, Word.crosstalk)) solveCrosstalk<T>(job, k0, k1);
  else withoutCrosstalk<T>(job, k0, k1);
}
