/** Cosmic rays in a group of columns, in lanes; src/reference/cosmic.ts tells the rule. */
import { MaskBit } from "../src/reference/bits";
import { count, laneRows, Numbers, number, pointer, Word, windowRows } from "./job";
import { windowOffset, windowWeights } from "./joint";
import { bytesOfLanes, lanesSet, lanesWithout, spread } from "./lanes";
import { pixelVariance } from "./variance";

/** Rows each side within which only the worst pixel goes in one round. */
const clusterRows: i32 = 2;

/** A profile's misfit further out than reachRows: share of the fibre's light on any pixel of its window. */
const wingShare: f64 = 0.02;
/** Rows by which a misfit may displace light. */
const reachRows: i32 = 2;

/** Squared excess over noise on every row, 0 where the pixel is not good or lies below the model: Word.excess. */
export function squaredExcess<T extends number>(job: usize): void {
  lightInReach<T>(job);
  const background = pointer(job, Word.backgroundRows);
  const model = pointer(job, Word.model);
  const light = pointer(job, Word.light);
  const error = spread<T>(number(job, Numbers.profileError));
  for (let row: i32 = 0; row < laneRows(job); row++) {
    const at = (<usize>row) << 4;
    const expected = v128.load(model + at);
    const excess = v128.pmax<T>(v128.sub<T>(v128.load(light + at), expected), spread<T>(0));
    const variance = pixelVariance<T>(job, at, v128.add<T>(expected, v128.load(background + at)));
    const slack = v128.mul<T>(error, v128.load(pointer(job, Word.reach) + at));
    const ratio = v128.div<T>(v128.mul<T>(excess, excess), v128.add<T>(variance, v128.mul<T>(slack, slack)));
    const good = lanesWithout<T>(load<u32>(pointer(job, Word.bits) + ((<usize>row) << 2)));
    v128.store(pointer(job, Word.excess) + at, v128.and(ratio, good));
  }
}

/** Marks the worst pixel of each cluster beyond κ². Returns the lanes in which any was marked: all ones. */
export function rejectWorst<T extends number>(job: usize): v128 {
  const limit = spread<T>(number(job, Numbers.kappaSquared));
  let marked = spread<T>(0);
  for (let row: i32 = 0; row < laneRows(job); row++) {
    const beyond = v128.gt<T>(v128.load(pointer(job, Word.excess) + ((<usize>row) << 4)), limit);
    if (!v128.any_true(beyond)) continue;
    const worst = v128.and(beyond, worstAround<T>(job, row));
    const bitsAt = pointer(job, Word.bits) + ((<usize>row) << 2);
    store<u32>(bitsAt, load<u32>(bitsAt) | bytesOfLanes(lanesSet<T>(worst), MaskBit.cosmic));
    marked = v128.or(marked, worst);
  }
  return marked;
}

/** The bytes of the lanes whose excess on `row` is beyond the lower limit. */
export function suspects<T extends number>(job: usize, row: i32): u32 {
  const limit = spread<T>(number(job, Numbers.growKappaSquared));
  const beyond = v128.gt<T>(v128.load(pointer(job, Word.excess) + ((<usize>row) << 4)), limit);
  return v128.any_true(beyond) ? bytesOfLanes(lanesSet<T>(beyond), MaskBit.suspect) : 0;
}

/** Σ |f_k| · (largest weight within ± reachRows + wingShare) on every row: Word.reach, what a misfit is a share of. */
function lightInReach<T extends number>(job: usize): void {
  const nWindow = windowRows(job);
  const reach = pointer(job, Word.reach);
  memory.fill(reach, 0, (<usize>laneRows(job)) << 4);
  for (let k: i32 = 0; k < count(job, Word.nFibre); k++) {
    const flux = v128.abs<T>(v128.load(pointer(job, Word.fluxes) + ((<usize>k) << 4)));
    const own = windowWeights(job, k);
    const first = reach + windowOffset(job, k);
    for (let i: i32 = 0; i < nWindow; i++) {
      let largest = spread<T>(0);
      for (let j = max(i - reachRows, 0); j <= min(i + reachRows, nWindow - 1); j++) {
        largest = v128.pmax<T>(largest, v128.load(own + ((<usize>j) << 4)));
      }
      const at = first + ((<usize>i) << 4);
      const light = v128.mul<T>(flux, v128.add<T>(largest, spread<T>(wingShare)));
      v128.store(at, v128.add<T>(v128.load(at), light));
    }
  }
}

function worstAround<T extends number>(job: usize, row: i32): v128 {
  const excess = pointer(job, Word.excess);
  const own = v128.load(excess + ((<usize>row) << 4));
  let worst = v128.eq<T>(own, own);
  for (let j: i32 = 1; j <= clusterRows; j++) {
    if (row - j >= 0) worst = v128.and(worst, v128.lt<T>(v128.load(excess + ((<usize>(row - j)) << 4)), own));
    if (row + j < laneRows(job))
      worst = v128.and(worst, v128.le<T>(v128.load(excess + ((<usize>(row + j)) << 4)), own));
  }
  return worst;
}
