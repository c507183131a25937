/** Flags of a group of columns: what happened to the pixels under each profile. Rare work, done lane by lane;
 * src/reference/flags.ts is the same for one column. */
import { Flag, MaskBit } from "../src/reference/bits";
import { count, pointer, Word, windowRows } from "./job";
import { windowOffset, windowStartOf, windowWeights } from "./joint";
import { laneAt, laneCount } from "./lanes";

const noticedShare: f64 = 0.01;
const largestLoss: f64 = 0.5;
const unsettledSigma: f64 = 0.1;

/** Fills Word.flagsOfLanes, nFibre × lanes, for the columns from `x` on. */
export function groupFlags<T extends number>(job: usize, x: i32): void {
  const nFibre = count(job, Word.nFibre);
  const nLane = laneCount<T>();
  const flags = pointer(job, Word.flagsOfLanes);
  for (let k: i32 = 0; k < nFibre; k++) {
    const masked = anyBits(job, k);
    for (let lane: i32 = 0; lane < nLane; lane++) {
      let own = fibreFlags<T>(job, k, x, lane);
      if (masked) own |= pixelFlags<T>(job, k, lane);
      store<i32>(flags + ((<usize>(k * nLane + lane)) << 2), own);
    }
  }
  for (let k: i32 = 0; k < nFibre; k++) {
    for (let lane: i32 = 0; lane < nLane; lane++) {
      if (saturatedAt(job, k, k - 1, nLane, lane) || saturatedAt(job, k, k + 1, nLane, lane)) {
        const at = flags + ((<usize>(k * nLane + lane)) << 2);
        store<i32>(at, load<i32>(at) | Flag.neighbourSaturated);
      }
    }
  }
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

function anyBits(job: usize, k: i32): bool {
  const bitsAt = pointer(job, Word.bits) + (windowOffset(job, k) >> 2);
  let any: u32 = 0;
  for (let i: i32 = 0; i < windowRows(job); i++) any |= load<u32>(bitsAt + ((<usize>i) << 2));
  return any != 0;
}

function saturatedAt(job: usize, k: i32, m: i32, nLane: i32, lane: i32): bool {
  if (m < 0 || m >= count(job, Word.nFibre)) return false;
  if (abs(windowStartOf(job, m) - windowStartOf(job, k)) >= windowRows(job)) return false;
  return (load<i32>(pointer(job, Word.flagsOfLanes) + ((<usize>(m * nLane + lane)) << 2)) & Flag.saturated) != 0;
}
