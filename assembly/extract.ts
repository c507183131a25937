/** Extraction of a stretch of columns, a group of lanes at a time; src/reference/extract.ts is the readable twin.
 *
 *     columns   |<------- block ------->|<------- block ------->|     profiles at four nodes of each block
 *               | group | group | …     |                             each v128 = the group's columns
 *
 * A lane's answer never depends on the lanes beside it: a lane that has settled keeps its variances, so that further
 * rounds, run for the others' sake, give it the same bits again. */
import { boxcar } from "./boxcar";
import { loadGroup, prepareRowPolynomials, storeGroup, storeModel, storeRejected } from "./columns";
import { rejectWorst, squaredExcess } from "./cosmic";
import { solveCrosstalk, withoutCrosstalk } from "./crosstalk";
import { groupFlags } from "./flags";
import { count, MethodCode, pointer, Word } from "./job";
import { jointCovariance, modelLight, normalEquations, solveNormal } from "./joint";
import { laneCount, spread } from "./lanes";
import { optimal } from "./optimal";
import { blockProfiles, interpolateProfiles, prepareNodeShares } from "./profile";
import { weighRows } from "./variance";

/** Tables that all columns share: once a job, before the first stretch. */
export function prepareExtraction32(job: usize): void {
  prepareNodeShares<f32>(job);
  prepareRowPolynomials<f32>(job);
}

export function prepareExtraction64(job: usize): void {
  prepareNodeShares<f64>(job);
  prepareRowPolynomials<f64>(job);
}

/** Columns x0 … x1 − 1; x0 must begin a block. */
export function extractColumns32(job: usize, x0: i32, x1: i32): void {
  extractColumns<f32>(job, x0, x1);
}

export function extractColumns64(job: usize, x0: i32, x1: i32): void {
  extractColumns<f64>(job, x0, x1);
}

function extractColumns<T extends number>(job: usize, x0: i32, x1: i32): void {
  const blockColumns = count(job, Word.blockColumns);
  const nLane = laneCount<T>();
  for (let blockStart = x0; blockStart < x1; blockStart += blockColumns) {
    blockProfiles<T>(job, blockStart);
    const end = min(blockStart + blockColumns, x1);
    for (let x = blockStart; x < end; x += nLane) {
      interpolateProfiles<T>(job, x - blockStart);
      extractGroup<T>(job, x, min(nLane, end - x));
    }
  }
}

/** One group: settle variances and rejections, estimate, write out. */
function extractGroup<T extends number>(job: usize, x: i32, nValid: i32): void {
  const rejecting = count(job, Word.reject) != 0;
  const minRounds = count(job, Word.minRounds);
  const everyLane = i32x4.splat(-1);
  loadGroup<T>(job, x, nValid);
  weighRows<T>(job, pointer(job, Word.light), everyLane);
  normalEquations<T>(job);
  solveNormal<T>(job);
  modelLight<T>(job);
  let unsettled = everyLane;
  memory.fill(pointer(job, Word.lastChange), 0, (<usize>count(job, Word.nFibre)) << 4);
  for (let round: i32 = 0; round < count(job, Word.maxRounds); round++) {
    let marked = spread<T>(0);
    if (rejecting) {
      squaredExcess<T>(job);
      marked = rejectWorst<T>(job);
    }
    const active = round < minRounds ? everyLane : v128.or(marked, unsettled);
    if (!v128.any_true(active)) break;
    unsettled = refine<T>(job, active);
  }
  if (rejecting) {
    squaredExcess<T>(job); // before the estimate, which puts the method's fluxes in place of the fit's
    storeRejected<T>(job, x, nValid);
  }
  storeModel<T>(job, x, nValid);
  estimate<T>(job);
  groupFlags<T>(job, x);
  storeGroup<T>(job, x, nValid);
}

/** Change of a flux, in units of the σ it would have alone, up to which its column has settled. */
const settledSigma: f64 = 0.1;

/** New variances from the model, and the fit again; what the fluxes changed by is kept for the lanes that moved. Returns
 * the lanes in which any fibre has not settled: all ones. */
function refine<T extends number>(job: usize, active: v128): v128 {
  const bytes = (<usize>count(job, Word.nFibre)) << 4;
  const before = pointer(job, Word.covariancesBelow); // free until the estimate
  memory.copy(before, pointer(job, Word.fluxes), bytes);
  weighRows<T>(job, pointer(job, Word.model), active);
  normalEquations<T>(job);
  solveNormal<T>(job);
  const limit = spread<T>(settledSigma * settledSigma);
  let unsettled = spread<T>(0);
  let normal = pointer(job, Word.normal);
  for (let at: usize = 0; at < bytes; at += 16) {
    const lastAt = pointer(job, Word.lastChange) + at;
    const change = v128.sub<T>(v128.load(pointer(job, Word.fluxes) + at), v128.load(before + at));
    const last = v128.bitselect(change, v128.load(lastAt), active);
    v128.store(lastAt, last);
    const squared = v128.mul<T>(v128.mul<T>(last, last), v128.load(normal));
    unsettled = v128.or(unsettled, v128.gt<T>(squared, limit));
    normal += (<usize>(count(job, Word.bandwidth) + 1)) << 4;
  }
  modelLight<T>(job);
  return unsettled;
}

function estimate<T extends number>(job: usize): void {
  const method = count(job, Word.method);
  if (method == MethodCode.joint) {
    jointCovariance<T>(job);
    return;
  }
  if (method == MethodCode.optimal) optimal<T>(job);
  else boxcar<T>(job);
  if (count(job, Word.crosstalk)) solveCrosstalk<T>(job);
  else withoutCrosstalk<T>(job);
}
