/** Normal equations AᵀN⁻¹A f = AᵀN⁻¹d of a group of columns, their solution and covariance, in lanes, for all fibres or for
 * a stretch of them whose neighbours stand still. src/reference/joint.ts is the same for one column. */
import { factorBand, factorRow, inverseBand, solveBand, substituteRow } from "./banded";
import { count, pointer, Word, windowOffset, windowRows, windowStartOf, windowWeights } from "./job";
import { anyBitsInWindow, lanesWithout, spread } from "./lanes";

/** Share of its light that a fibre must have on good pixels to take part; src/reference/joint.ts says why. */
export const leastShare: f64 = 0.01;

/** Fills Word.normal and Word.raw (the right-hand side) of fibres k0 … k1 − 1 from weights, light less the wings', and
 * inverse variances; fibres below `lowest` are not looked at. `factor`: each row is factored and substituted as it comes, into
 * Word.band and Word.solution: the chain from pivot to pivot then runs beside the sums. */
export function normalEquations<T extends number>(job: usize, k0: i32, k1: i32, lowest: i32, factor: bool): void {
  const nWindow = windowRows(job);
  const bandwidth = count(job, Word.bandwidth);
  const net = pointer(job, Word.net);
  const ivar = pointer(job, Word.inverseVariance);
  const weighted = pointer(job, Word.weighted);
  const bits = pointer(job, Word.bits);
  const raw = pointer(job, Word.raw);
  const normal = pointer(job, Word.normal);
  const band = pointer(job, Word.band);
  const solution = pointer(job, Word.solution);
  const rowBytes = (<usize>(bandwidth + 1)) << 4;
  const windowBytes = (<usize>nWindow) << 4;
  const zero = spread<T>(0);
  for (let k = k0; k < k1; k++) {
    const own = windowWeights(job, k);
    const first = windowOffset(job, k);
    const data = net + first;
    const inverse = ivar + first;
    let rhs = zero;
    let sum = zero;
    for (let at: usize = 0; at < windowBytes; at += 16) {
      const weight = v128.load(own + at);
      const u = v128.mul<T>(weight, v128.load(inverse + at));
      v128.store(weighted + at, u);
      rhs = v128.add<T>(rhs, v128.mul<T>(u, v128.load(data + at)));
      sum = v128.add<T>(sum, v128.mul<T>(u, weight));
    }
    let bandAt = normal + <usize>k * rowBytes;
    const masked = anyBitsInWindow(bits + (first >> 2), nWindow);
    const measured = masked ? enoughLight<T>(own, inverse, bits + (first >> 2), windowBytes) : i32x4.splat(-1);
    v128.store(raw + ((<usize>k) << 4), v128.and(rhs, measured));
    v128.store(bandAt, v128.and(sum, measured));
    const start = windowStartOf(job, k);
    for (let j: i32 = 1; j <= bandwidth; j++) {
      bandAt += 16;
      if (k - j < lowest) {
        v128.store(bandAt, zero);
        continue;
      }
      const ahead = start - windowStartOf(job, k - j);
      const lower = windowWeights(job, k - j) + ((<usize>ahead) << 4);
      const sharedBytes = (<usize>max(nWindow - ahead, 0)) << 4;
      sum = zero;
      for (let at: usize = 0; at < sharedBytes; at += 16) {
        sum = v128.add<T>(sum, v128.mul<T>(v128.load(weighted + at), v128.load(lower + at)));
      }
      const diagonalBelow = v128.load(normal + <usize>(k - j) * rowBytes);
      v128.store(bandAt, v128.and(v128.and(sum, measured), v128.gt<T>(diagonalBelow, zero))); // 0 there: not measured
    }
    if (factor) {
      const row = band + <usize>k * rowBytes;
      const reach = min(k, bandwidth);
      for (let at: usize = 0; at < rowBytes; at += 16) {
        v128.store(row + at, v128.load(normal + <usize>k * rowBytes + at));
      }
      factorRow<T>(row, reach, rowBytes);
      const rhsAt = solution + ((<usize>k) << 4);
      v128.store(rhsAt, v128.and(rhs, measured));
      substituteRow<T>(row, reach, rhsAt);
    }
  }
}

/** Lanes in which the window has lost no pixel, or its good ones hold enough of the fibre's light. */
function enoughLight<T extends number>(own: usize, ivar: usize, bits: usize, windowBytes: usize): v128 {
  const zero = spread<T>(0);
  let share = zero;
  let lost: u32 = 0;
  for (let at: usize = 0; at < windowBytes; at += 16) {
    share = v128.add<T>(share, v128.and(v128.load(own + at), v128.gt<T>(v128.load(ivar + at), zero)));
    lost |= load<u32>(bits + (at >> 2));
  }
  return v128.or(v128.ge<T>(share, spread<T>(leastShare)), lanesWithout<T>(lost));
}

/** Σ over the rows that the windows of k and m share of `ofK`·`ofM`; each v128, nWindow long, of its own window. */
export function overlap<T extends number>(job: usize, k: i32, m: i32, ofK: usize, ofM: usize): v128 {
  const nWindow = windowRows(job);
  const ahead = windowStartOf(job, k) - windowStartOf(job, m);
  const from = max(-ahead, 0);
  const to = min(nWindow - ahead, nWindow);
  let sum = spread<T>(0);
  for (let i = from; i < to; i++) {
    sum = v128.add<T>(
      sum,
      v128.mul<T>(v128.load(ofK + ((<usize>i) << 4)), v128.load(ofM + ((<usize>(i + ahead)) << 4))),
    );
  }
  return sum;
}

/** Fluxes of fibres k0 … k1 − 1 from their normal equations: Word.solution. What is below k0 or from k1 on keeps its flux. */
export function solveNormal<T extends number>(job: usize, k0: i32, k1: i32): void {
  const bandwidth = count(job, Word.bandwidth);
  const rowBytes = (<usize>(bandwidth + 1)) << 4;
  const band = pointer(job, Word.band) + <usize>k0 * rowBytes;
  const normal = pointer(job, Word.normal);
  const fluxes = pointer(job, Word.fluxes);
  const at = (<usize>k0) << 4;
  const solution = pointer(job, Word.solution);
  const n = k1 - k0;
  memory.copy(band, normal + <usize>k0 * rowBytes, <usize>n * rowBytes);
  memory.copy(solution + at, pointer(job, Word.raw) + at, (<usize>n) << 4);
  for (let k = k0; k < min(k0 + bandwidth, k1); k++) {
    for (let j = k - k0 + 1; j <= min(bandwidth, k); j++) {
      takeOff<T>(solution, k, normal + <usize>k * rowBytes + ((<usize>j) << 4), fluxes, k - j);
    }
  }
  for (let k = k1; k < min(k1 + bandwidth, count(job, Word.nFibre)); k++) {
    for (let j = k - k1 + 1; j <= bandwidth; j++) {
      if (k - j >= k0) takeOff<T>(solution, k - j, normal + <usize>k * rowBytes + ((<usize>j) << 4), fluxes, k);
    }
  }
  factorBand<T>(band, n, bandwidth);
  solveBand<T>(band, n, bandwidth, solution + at);
}

function takeOff<T extends number>(rhs: usize, k: i32, couplingPtr: usize, fluxes: usize, other: i32): void {
  const at = rhs + ((<usize>k) << 4);
  const light = v128.mul<T>(v128.load(couplingPtr), v128.load(fluxes + ((<usize>other) << 4)));
  v128.store(at, v128.sub<T>(v128.load(at), light));
}

/** Variances and neighbours' covariances of fibres k0 … k1 − 1 from Word.normal, or from its factors where Word.band has them. */
export function jointCovariance<T extends number>(job: usize, k0: i32, k1: i32, factored: bool): void {
  const n = k1 - k0;
  const bandwidth = count(job, Word.bandwidth);
  const rowBytes = (<usize>(bandwidth + 1)) << 4;
  const offset = <usize>k0 * rowBytes;
  const band = pointer(job, Word.band) + offset;
  if (!factored) {
    memory.copy(band, pointer(job, Word.normal) + offset, <usize>n * rowBytes);
    factorBand<T>(band, n, bandwidth);
  }
  const inverse = pointer(job, Word.inverse) + offset;
  inverseBand<T>(band, n, bandwidth, inverse);
  const variances = pointer(job, Word.variances);
  const below = pointer(job, Word.covariancesBelow);
  let at = inverse;
  for (let k = k0; k < k1; k++) {
    v128.store(variances + ((<usize>k) << 4), v128.load(at));
    v128.store(below + ((<usize>k) << 4), k > k0 && bandwidth > 0 ? v128.load(at, 16) : spread<T>(0));
    at += rowBytes;
  }
}
