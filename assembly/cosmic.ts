/** The rows of a group of columns held against the model of their light, in lanes: new variances, and cosmic rays;
 * src/reference/cosmic.ts tells the rule. */
import { MaskBit } from "../src/reference/bits";
import { callRow, firstFibreOn } from "./chunks";
import { count, Numbers, number, pointer, Word } from "./job";
import { bytesOfLanes, laneCount, lanesSet, lanesWithout, spread } from "./lanes";
import { knowsResponse, pixelVariance } from "./variance";

/** Rows each side within which only the worst pixel goes in one round. */
const clusterRows: i32 = 2;
/** Rows by which a misfit of the profile may displace light. */
const reachRows: i32 = 2;
/** The same further out: share of the light of the fibres about, on any pixel. */
const wingShare: f64 = 0.02;

/** Holds the lane rows row0 … row1 − 1 against Word.model + Word.wingLight, in the lanes of `mask`.
 * - `weigh`: new inverse variances from the model, and the light less the wings' for the next fit;
 * - otherwise what the fit leaves: χ² and suspects.
 * - `rejecting`: suspects are noted; `mark`: the worst pixel of each cluster beyond κ² is rejected too, and the fibres that
 *   see it are called. */
export function confront<T extends number>(
  job: usize,
  row0: i32,
  row1: i32,
  mask: v128,
  rejecting: bool,
  mark: bool,
  weigh: bool,
): void {
  const candidates = pointer(job, Word.candidates);
  const nCandidate = confrontRows<T>(job, row0, row1, mask, rejecting, weigh, candidates);
  if (!mark) return;
  // All are judged before any is marked: a marked pixel would no longer outshine its neighbours.
  for (let i: i32 = 0; i < nCandidate; i++) judge<T>(job, candidates + ((<usize>i) << 3), mask);
  for (let i: i32 = 0; i < nCandidate; i++) rejectLanes<T>(job, candidates + ((<usize>i) << 3));
}

/** Returns how many candidates for rejection it has noted: rows with an excess that noise alone does not explain. */
function confrontRows<T extends number>(
  job: usize,
  from: i32,
  to: i32,
  mask: v128,
  rejecting: bool,
  weigh: bool,
  candidates: usize,
): i32 {
  const responds = knowsResponse(job);
  const light = pointer(job, Word.light);
  const background = pointer(job, Word.backgroundRows);
  const fixed = pointer(job, Word.fixed);
  const fixedRows = pointer(job, Word.fixedRows);
  const winged = count(job, Word.wing) != 0;
  const wings = pointer(job, Word.wingLight);
  const model = pointer(job, Word.model);
  const net = pointer(job, Word.net);
  const ivar = pointer(job, Word.inverseVariance);
  const bits = pointer(job, Word.bits);
  const chiSquare = pointer(job, Word.chiSquare);
  const suspects = pointer(job, Word.suspects);
  const others = bytesOfLanes(~lanesSet<T>(mask) & ((1 << laneCount<T>()) - 1), 255);
  const limit = spread<T>(number(job, Numbers.kappaSquared));
  const suspect = spread<T>(number(job, Numbers.growKappaSquared));
  const one = spread<T>(1);
  const zero = spread<T>(0);
  let n: i32 = 0;
  for (let row = from; row < to; row++) {
    const at = (<usize>row) << 4;
    const data = v128.load(light + at);
    let total = v128.load(model + at);
    if (winged) total = v128.add<T>(total, v128.load(wings + at));
    const left = v128.sub<T>(data, total);
    const masked = load<u32>(bits + (at >> 2));
    const all = v128.add<T>(total, v128.load(background + at));
    const variance = pixelVariance<T>(job, v128.load(fixed + (at & fixedRows)), at, all, responds);
    let squared = zero;
    if (rejecting) {
      const excess = v128.pmax<T>(left, zero);
      squared = v128.mul<T>(excess, excess);
      if (masked) squared = v128.and(squared, lanesWithout<T>(masked));
      // Noise alone; what the profile's own error explains besides is asked of the few that are left.
      const beyond = v128.and(v128.gt<T>(squared, v128.mul<T>(limit, variance)), mask);
      if (v128.any_true(beyond)) {
        store<i32>(candidates + ((<usize>n) << 3), row);
        n++;
      }
    }
    if (weigh) {
      let inverse = v128.div<T>(one, variance);
      if (masked) inverse = v128.and(inverse, lanesWithout<T>(masked));
      v128.store(ivar + at, chosen(inverse, ivar + at, mask, others));
      if (winged) {
        const fresh = v128.sub<T>(data, v128.load(wings + at));
        v128.store(net + at, chosen(fresh, net + at, mask, others));
      }
    } else {
      const square = v128.mul<T>(v128.mul<T>(left, left), v128.load(ivar + at));
      v128.store(chiSquare + at, chosen(square, chiSquare + at, mask, others));
      if (rejecting) {
        let bytes: u32 = 0;
        if (v128.any_true(v128.gt<T>(squared, v128.mul<T>(suspect, variance)))) {
          const beyond = v128.gt<T>(squared, v128.mul<T>(suspect, allowedOn<T>(job, row)));
          bytes = bytesOfLanes(lanesSet<T>(beyond), MaskBit.suspect);
        }
        const kept = others ? load<u32>(suspects + (at >> 2)) & others : 0;
        store<u32>(suspects + (at >> 2), kept | (bytes & ~others));
      }
    }
  }
  return n;
}

/** `fresh` in the lanes of `mask`, what lies at `ptr` in the others, of which there are none when `others` is 0. */
function chosen(fresh: v128, ptr: usize, mask: v128, others: u32): v128 {
  return others ? v128.bitselect(fresh, v128.load(ptr), mask) : fresh;
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

function excessOn<T extends number>(job: usize, row: i32): v128 {
  const at = (<usize>row) << 4;
  const excess = v128.pmax<T>(
    v128.sub<T>(v128.load(pointer(job, Word.light) + at), lightOn<T>(job, row)),
    spread<T>(0),
  );
  return v128.and(v128.mul<T>(excess, excess), lanesWithout<T>(load<u32>(pointer(job, Word.bits) + (at >> 2))));
}

/** What an excess squared is held against: variance and the profile's own error. */
function allowedOn<T extends number>(job: usize, row: i32): v128 {
  const at = (<usize>row) << 4;
  const light = v128.add<T>(lightOn<T>(job, row), v128.load(pointer(job, Word.backgroundRows) + at));
  const fixed = v128.load(pointer(job, Word.fixed) + (at & pointer(job, Word.fixedRows)));
  const variance = pixelVariance<T>(job, fixed, at, light, knowsResponse(job));
  const slack = v128.mul<T>(spread<T>(number(job, Numbers.profileError)), reachOn<T>(job, row));
  return v128.add<T>(variance, v128.mul<T>(slack, slack));
}

/** Light nearby that a misfit is a share of: the most within two rows, and a share of that of the fibres about, the first
 * whose window ends above the row and as many more as windows can overlap. */
export function reachOn<T extends number>(job: usize, row: i32): v128 {
  let near = v128.abs<T>(lightOn<T>(job, row));
  for (let j: i32 = 1; j <= reachRows; j++) {
    near = v128.pmax<T>(near, v128.abs<T>(lightOn<T>(job, row - j)));
    near = v128.pmax<T>(near, v128.abs<T>(lightOn<T>(job, row + j)));
  }
  const fluxes = pointer(job, Word.fluxes);
  const k = firstFibreOn(job, row);
  let about = spread<T>(0);
  for (let m = k; m <= min(k + count(job, Word.bandwidth), count(job, Word.nFibre) - 1); m++) {
    about = v128.add<T>(about, v128.abs<T>(v128.load(fluxes + ((<usize>m) << 4))));
  }
  return v128.add<T>(near, v128.mul<T>(about, spread<T>(wingShare)));
}

function lightOn<T extends number>(job: usize, row: i32): v128 {
  const at = (<usize>row) << 4;
  return v128.add<T>(v128.load(pointer(job, Word.model) + at), v128.load(pointer(job, Word.wingLight) + at));
}

function beyondLimit<T extends number>(job: usize, row: i32): v128 {
  const limit = spread<T>(number(job, Numbers.kappaSquared));
  return v128.gt<T>(excessOn<T>(job, row), v128.mul<T>(limit, allowedOn<T>(job, row)));
}

function squaredExcess<T extends number>(job: usize, row: i32): v128 {
  return v128.div<T>(excessOn<T>(job, row), allowedOn<T>(job, row));
}
