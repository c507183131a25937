/** The rows of a group of columns held against the model of their light, in lanes: new variances, and cosmic rays;
 * src/reference/cosmic.ts tells the rule. */
import { MaskBit } from "../src/reference/bits";
import { callRow } from "./chunks";
import { count, Numbers, number, pointer, Word, windowLaneRow, windowRows } from "./job";
import { bytesOfLanes, laneCount, lanesSet, lanesWithout, spread } from "./lanes";
import { knowsResponse, pixelVariance } from "./variance";

/** Rows each side within which only the worst pixel goes in one round. */
const clusterRows: i32 = 2;
/** A profile's misfit further out than two rows: share of the light of the fibres about on any pixel. */
const wingShare: f64 = 0.02;

/** Holds the lane rows row0 … row1 − 1, which fibres k0 … k1 − 1 light, against Word.model + Word.wingLight, in the lanes
 * of `mask`.
 * - `weigh`: new inverse variances from the model, and the light less the wings' for the next fit;
 * - otherwise what the fit leaves: χ² and suspects.
 * - `rejecting`: suspects are noted; `mark`: the worst pixel of each cluster beyond κ² is rejected too, and the fibres that
 *   see it are called. */
export function confront<T extends number>(
  job: usize,
  k0: i32,
  k1: i32,
  row0: i32,
  row1: i32,
  mask: v128,
  rejecting: bool,
  mark: bool,
  weigh: bool,
): void {
  const nFibre = count(job, Word.nFibre);
  const bandwidth = count(job, Word.bandwidth);
  const nWindow = windowRows(job);
  const fluxes = pointer(job, Word.fluxes);
  const candidates = pointer(job, Word.candidates);
  const share = spread<T>(wingShare);
  const zero = spread<T>(0);
  let nCandidate: i32 = 0;
  let row = row0;
  for (let k = k0; k <= k1; k++) {
    const last = k == k1;
    const end = last ? row1 : min(windowLaneRow(job, k) + nWindow, row1);
    if (end <= row) continue;
    let about = zero;
    if (!last) {
      for (let m = k; m <= min(k + bandwidth, nFibre - 1); m++) {
        about = v128.add<T>(about, v128.abs<T>(v128.load(fluxes + ((<usize>m) << 4))));
      }
      about = v128.mul<T>(about, share);
    }
    nCandidate = confrontRows<T>(job, row, end, about, mask, rejecting, weigh, candidates, nCandidate);
    row = end;
  }
  if (!mark) return;
  // All are judged before any is marked: a marked pixel would no longer outshine its neighbours.
  for (let i: i32 = 0; i < nCandidate; i++) judge<T>(job, candidates + ((<usize>i) << 3), mask);
  for (let i: i32 = 0; i < nCandidate; i++) rejectLanes<T>(job, candidates + ((<usize>i) << 3));
}

/** One run of rows that have the same fibres about. Returns how many candidates for rejection there are now. */
function confrontRows<T extends number>(
  job: usize,
  from: i32,
  to: i32,
  about: v128,
  mask: v128,
  rejecting: bool,
  weigh: bool,
  candidates: usize,
  nBefore: i32,
): i32 {
  const responds = knowsResponse(job);
  const light = pointer(job, Word.light);
  const background = pointer(job, Word.backgroundRows);
  const fixed = pointer(job, Word.fixed);
  const wings = pointer(job, Word.wingLight);
  const model = pointer(job, Word.model);
  const net = pointer(job, Word.net);
  const ivar = pointer(job, Word.inverseVariance);
  const bits = pointer(job, Word.bits);
  const reachRows = pointer(job, Word.reach);
  const chiSquare = pointer(job, Word.chiSquare);
  const suspects = pointer(job, Word.suspects);
  const others = bytesOfLanes(~lanesSet<T>(mask) & ((1 << laneCount<T>()) - 1), 255);
  const error = spread<T>(number(job, Numbers.profileError));
  const limit = spread<T>(number(job, Numbers.kappaSquared));
  const suspect = spread<T>(number(job, Numbers.growKappaSquared));
  const one = spread<T>(1);
  const zero = spread<T>(0);
  let n = nBefore;
  let at = (<usize>from) << 4;
  // Light on the row and the next two; the largest of two rows, from two rows back on.
  let here = lightOn<T>(model, wings, at);
  let next = lightOn<T>(model, wings, at + 16);
  const behind = v128.abs<T>(lightOn<T>(model, wings, at - 16));
  let pairBehind = v128.pmax<T>(v128.abs<T>(lightOn<T>(model, wings, at - 32)), behind);
  let pairHere = v128.pmax<T>(behind, v128.abs<T>(here));
  let pairAhead = v128.pmax<T>(v128.abs<T>(here), v128.abs<T>(next));
  for (let row = from; row < to; row++) {
    const second = lightOn<T>(model, wings, at + 32);
    const left = v128.sub<T>(v128.load(light + at), here);
    const masked = load<u32>(bits + (at >> 2));
    const variance = pixelVariance<T>(
      job,
      v128.load(fixed + at),
      at,
      v128.add<T>(here, v128.load(background + at)),
      responds,
    );
    let squared = zero;
    let allowed = zero;
    if (rejecting) {
      const near = v128.pmax<T>(v128.pmax<T>(pairBehind, pairAhead), v128.abs<T>(second));
      const reach = v128.add<T>(near, about);
      v128.store(reachRows + at, chosen(reach, reachRows + at, mask, others));
      const excess = v128.pmax<T>(left, zero);
      const slack = v128.mul<T>(error, reach);
      squared = v128.mul<T>(excess, excess);
      if (masked) squared = v128.and(squared, lanesWithout<T>(masked));
      allowed = v128.add<T>(variance, v128.mul<T>(slack, slack));
      const beyond = v128.and(v128.gt<T>(squared, v128.mul<T>(limit, allowed)), mask);
      if (v128.any_true(beyond)) {
        store<i32>(candidates + ((<usize>n) << 3), row);
        n++;
      }
    }
    if (weigh) {
      let inverse = v128.div<T>(one, variance);
      if (masked) inverse = v128.and(inverse, lanesWithout<T>(masked));
      v128.store(ivar + at, chosen(inverse, ivar + at, mask, others));
      const own = v128.sub<T>(v128.load(light + at), v128.load(wings + at));
      v128.store(net + at, chosen(own, net + at, mask, others));
    } else {
      const square = v128.mul<T>(v128.mul<T>(left, left), v128.load(ivar + at));
      v128.store(chiSquare + at, chosen(square, chiSquare + at, mask, others));
      if (rejecting) {
        const beyond = v128.gt<T>(squared, v128.mul<T>(suspect, allowed));
        const bytes = v128.any_true(beyond) ? bytesOfLanes(lanesSet<T>(beyond), MaskBit.suspect) : 0;
        const kept = others ? load<u32>(suspects + (at >> 2)) & others : 0;
        store<u32>(suspects + (at >> 2), kept | (bytes & ~others));
      }
    }
    here = next;
    next = second;
    pairBehind = pairHere;
    pairHere = pairAhead;
    pairAhead = v128.pmax<T>(v128.abs<T>(here), v128.abs<T>(next));
    at += 16;
  }
  return n;
}

/** `fresh` in the lanes of `mask`, what lies at `ptr` in the others, of which there are none when `others` is 0. */
function chosen(fresh: v128, ptr: usize, mask: v128, others: u32): v128 {
  return others ? v128.bitselect(fresh, v128.load(ptr), mask) : fresh;
}

function lightOn<T extends number>(model: usize, wings: usize, at: usize): v128 {
  return v128.add<T>(v128.load(model + at), v128.load(wings + at));
}

/** Writes beside a candidate's row the lanes, a byte each, in which it is beyond κ² and the worst of its cluster. */
function judge<T extends number>(job: usize, candidate: usize, mask: v128): void {
  const row = load<i32>(candidate);
  const own = squaredExcess<T>(job, row);
  let worst = v128.and(mask, beyondLimit<T>(job, row));
  for (let j: i32 = 1; j <= clusterRows; j++) {
    worst = v128.and(worst, v128.lt<T>(squaredExcess<T>(job, row - j), own));
    worst = v128.and(worst, v128.le<T>(squaredExcess<T>(job, row + j), own));
  }
  store<u32>(candidate, bytesOfLanes(lanesSet<T>(worst), MaskBit.cosmic), 4);
}

function rejectLanes<T extends number>(job: usize, candidate: usize): void {
  const row = load<i32>(candidate);
  const bytes = load<u32>(candidate, 4);
  if (bytes == 0) return;
  const bitsAt = pointer(job, Word.bits) + ((<usize>row) << 2);
  store<u32>(bitsAt, load<u32>(bitsAt) | bytes);
  const spared = lanesWithout<T>(bytes);
  const ivarAt = pointer(job, Word.inverseVariance) + ((<usize>row) << 4);
  v128.store(ivarAt, v128.and(v128.load(ivarAt), spared));
  callRow(job, row, v128.not(spared));
}

function excessOn<T extends number>(job: usize, at: usize): v128 {
  const total = lightOn<T>(pointer(job, Word.model), pointer(job, Word.wingLight), at);
  const excess = v128.pmax<T>(v128.sub<T>(v128.load(pointer(job, Word.light) + at), total), spread<T>(0));
  return v128.and(v128.mul<T>(excess, excess), lanesWithout<T>(load<u32>(pointer(job, Word.bits) + (at >> 2))));
}

/** What an excess squared is held against on a row that `confront` has seen: variance and the profile's own error. */
function allowedOn<T extends number>(job: usize, at: usize): v128 {
  const total = lightOn<T>(pointer(job, Word.model), pointer(job, Word.wingLight), at);
  const light = v128.add<T>(total, v128.load(pointer(job, Word.backgroundRows) + at));
  const variance = pixelVariance<T>(job, v128.load(pointer(job, Word.fixed) + at), at, light, knowsResponse(job));
  const reach = v128.load(pointer(job, Word.reach) + at);
  const slack = v128.mul<T>(spread<T>(number(job, Numbers.profileError)), reach);
  return v128.add<T>(variance, v128.mul<T>(slack, slack));
}

function beyondLimit<T extends number>(job: usize, row: i32): v128 {
  const at = (<usize>row) << 4;
  const limit = spread<T>(number(job, Numbers.kappaSquared));
  return v128.gt<T>(excessOn<T>(job, at), v128.mul<T>(limit, allowedOn<T>(job, at)));
}

function squaredExcess<T extends number>(job: usize, row: i32): v128 {
  const at = (<usize>row) << 4;
  return v128.div<T>(excessOn<T>(job, at), allowedOn<T>(job, at));
}
