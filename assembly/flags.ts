/** Flags of a group of columns: what happened to the pixels under each profile. Rare work, done lane by lane;
 * src/reference/flags.ts is the same for one column. */
import { Flag, MaskBit } from "../src/reference/bits";
import { count, pointer, Word, windowOffset, windowRows, windowStartOf, windowWeights } from "./job";
import { anyBitsInWindow, laneAt, laneCount, spread } from "./lanes";

const noticedShare: f64 = 0.01;
const largestLoss: f64 = 0.5;
const unsettledSigma: f64 = 0.1;

/** Fills Word.flagsOfLanes, nFibre × lanes, for fibres k0 … k1 − 1 in the columns from `x` on. Returns whether any is raised. */
export function groupFlags<T extends number>(job: usize, x: i32, k0: i32, k1: i32): bool {
  const nLane = laneCount<T>();
  const nWindow = windowRows(job);
  const bits = pointer(job, Word.bits);
  const flags = pointer(job, Word.flagsOfLanes);
  let raised = false;
  for (let k = k0; k < k1; k++) {
    const masked = anyBitsInWindow(bits + (windowOffset(job, k) >> 2), nWindow);
    const quiet = !masked && isQuiet<T>(job, k, x);
    if (quiet) {
      const at = flags + ((<usize>(k * nLane)) << 2);
      if (sizeof<T>() == 4) v128.store(at, spread<T>(0));
      else store<i64>(at, 0);
      continue;
    }
    raised = true;
    for (let lane: i32 = 0; lane < nLane; lane++) {
      let own = fibreFlags<T>(job, k, x, lane);
      if (masked) own |= pixelFlags<T>(job, k, lane);
      if (own & Flag.weightLost) own &= ~Flag.varianceUnsettled; // of a flux that is none
      store<i32>(flags + ((<usize>(k * nLane + lane)) << 2), own);
    }
  }
  if (!raised) return false;
  for (let k = k0; k < k1; k++) {
    for (let lane: i32 = 0; lane < nLane; lane++) {
      if (saturatedAt(job, k, k - 1, k0, k1, nLane, lane) || saturatedAt(job, k, k + 1, k0, k1, nLane, lane)) {
        const at = flags + ((<usize>(k * nLane + lane)) << 2);
        store<i32>(at, load<i32>(at) | Flag.neighbourSaturated);
      }
    }
  }
  return true;
}

/** Whether `fibreFlags` has nothing to say in any lane. */
function isQuiet<T extends number>(job: usize, k: i32, x: i32): bool {
  const seen = pointer(job, Word.seen) + ((<usize>k) << 3);
  if (x < load<i32>(seen) || x + laneCount<T>() - 1 > load<i32>(seen, 4)) return false;
  const at = (<usize>k) << 4;
  const start = <f64>windowStartOf(job, k);
  const centre = v128.load(pointer(job, Word.centre) + at);
  const variance = v128.load(pointer(job, Word.variances) + at);
  const change = v128.load(pointer(job, Word.lastChange) + at);
  let fine = v128.ge<T>(centre, spread<T>(-start)); // half a pixel inside, so that no rounding matters
  fine = v128.and(fine, v128.lt<T>(centre, spread<T>(<f64>count(job, Word.ny) - 1.0 - start)));
  fine = v128.and(fine, v128.gt<T>(variance, spread<T>(0)));
  const limit = v128.mul<T>(variance, spread<T>(0.9 * unsettledSigma * unsettledSigma));
  fine = v128.and(fine, v128.le<T>(v128.mul<T>(change, change), limit));
  return !v128.any_true(v128.not(fine));
}

function fibreFlags<T extends number>(job: usize, k: i32, x: i32, lane: i32): i32 {
  const at = (<usize>k) << 4;
  const change = <f64>laneAt<T>(pointer(job, Word.lastChange) + at, lane);
  const variance = <f64>laneAt<T>(pointer(job, Word.variances) + at, lane);
  const row = <f64>windowStartOf(job, k) + <f64>laneAt<T>(pointer(job, Word.centre) + at, lane);
  const seen = pointer(job, Word.seen) + ((<usize>k) << 3);
  let flags: i32 = x + lane >= load<i32>(seen) && x + lane <= load<i32>(seen, 4) ? 0 : Flag.extrapolated;
  if (!(row >= -0.5 && row < <f64>count(job, Word.ny) - 0.5)) flags |= Flag.outside;
  if (!(variance > 0)) flags |= Flag.weightLost;
  else if (change * change > unsettledSigma * unsettledSigma * variance) flags |= Flag.varianceUnsettled;
  return flags;
}

function pixelFlags<T extends number>(job: usize, k: i32, lane: i32): i32 {
  const bitsAt = pointer(job, Word.bits) + (windowOffset(job, k) >> 2);
  const weights = windowWeights(job, k);
  let lost: f64 = 0.0;
  let bad: f64 = 0.0;
  let saturated: f64 = 0.0;
  let cosmic: f64 = 0.0;
  for (let i: i32 = 0; i < windowRows(job); i++) {
    const bits = (load<u32>(bitsAt + ((<usize>i) << 2)) >> (lane << 3)) & 255;
    if (bits == 0) continue;
    const share = <f64>laneAt<T>(weights + ((<usize>i) << 4), lane);
    lost += share;
    if (bits & (MaskBit.bad | MaskBit.missing)) bad += share;
    if (bits & MaskBit.saturated) saturated += share;
    if (bits & (MaskBit.cosmic | MaskBit.grown)) cosmic += share;
  }
  let flags: i32 = 0;
  if (cosmic > noticedShare) flags |= Flag.cosmicRay;
  if (bad > noticedShare) flags |= Flag.badPixel;
  if (saturated > noticedShare) flags |= Flag.saturated;
  if (lost > largestLoss) flags |= Flag.weightLost;
  return flags;
}

function saturatedAt(job: usize, k: i32, m: i32, k0: i32, k1: i32, nLane: i32, lane: i32): bool {
  if (m < k0 || m >= k1) return false;
  if (abs(windowStartOf(job, m) - windowStartOf(job, k)) >= windowRows(job)) return false;
  return (load<i32>(pointer(job, Word.flagsOfLanes) + ((<usize>(m * nLane + lane)) << 2)) & Flag.saturated) != 0;
}
