/** Normal equations AᵀN⁻¹A f = AᵀN⁻¹d of a group of columns, their solution and covariance, in lanes.
 * src/reference/joint.ts is the same for one column. */
import { factorBand, inverseBand, solveBand } from "./banded";
import { count, laneRows, pointer, Word, windowRows } from "./job";
import { spread } from "./lanes";

/** Share of its light that a fibre must have on good pixels to take part; src/reference/joint.ts says why. */
export const leastShare: f64 = 0.01;

/** Fills Word.normal and Word.raw (the right-hand side) from weights, light and inverse variances. */
export function normalEquations<T extends number>(job: usize): void {
  const nWindow = windowRows(job);
  const bandwidth = count(job, Word.bandwidth);
  const nFibre = count(job, Word.nFibre);
  const light = pointer(job, Word.light);
  const ivar = pointer(job, Word.inverseVariance);
  const weighted = pointer(job, Word.weighted);
  const zero = spread<T>(0);
  const rowBytes = (<usize>(bandwidth + 1)) << 4;
  let bandAt = pointer(job, Word.normal);
  let rhsAt = pointer(job, Word.raw);
  for (let k: i32 = 0; k < nFibre; k++) {
    const own = windowWeights(job, k);
    const first = windowOffset(job, k);
    let rhs = zero;
    let share = zero;
    for (let at: usize = 0; at < (<usize>nWindow) << 4; at += 16) {
      const inverse = v128.load(ivar + first + at);
      const u = v128.mul<T>(v128.load(own + at), inverse);
      v128.store(weighted + at, u);
      rhs = v128.add<T>(rhs, v128.mul<T>(u, v128.load(light + first + at)));
      share = v128.add<T>(share, v128.and(v128.load(own + at), v128.gt<T>(inverse, zero)));
    }
    const measured = v128.ge<T>(share, spread<T>(leastShare));
    v128.store(rhsAt, v128.and(rhs, measured));
    for (let j: i32 = 0; j <= bandwidth; j++) {
      let sum = zero;
      if (j <= k) sum = v128.and(overlap<T>(job, k, k - j, weighted, windowWeights(job, k - j)), measured);
      if (j > 0 && j <= k) {
        const diagonalBelow = v128.load(bandAt - ((<usize>j) << 4) - <usize>j * rowBytes);
        sum = v128.and(sum, v128.gt<T>(diagonalBelow, zero)); // 0 there: not measured
      }
      v128.store(bandAt, sum);
      bandAt += 16;
    }
    rhsAt += 16;
  }
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

/** Fluxes of the normal equations; the factors stay in Word.band. */
export function solveNormal<T extends number>(job: usize): void {
  const nFibre = count(job, Word.nFibre);
  const bandwidth = count(job, Word.bandwidth);
  memory.copy(pointer(job, Word.band), pointer(job, Word.normal), (<usize>(nFibre * (bandwidth + 1))) << 4);
  memory.copy(pointer(job, Word.fluxes), pointer(job, Word.raw), (<usize>nFibre) << 4);
  factorBand<T>(pointer(job, Word.band), nFibre, bandwidth);
  solveBand<T>(pointer(job, Word.band), nFibre, bandwidth, pointer(job, Word.fluxes));
}

/** Variances and neighbours' covariances from the factors that `solveNormal` left. */
export function jointCovariance<T extends number>(job: usize): void {
  const nFibre = count(job, Word.nFibre);
  const bandwidth = count(job, Word.bandwidth);
  const inverse = pointer(job, Word.inverse);
  inverseBand<T>(pointer(job, Word.band), nFibre, bandwidth, inverse);
  for (let k: i32 = 0; k < nFibre; k++) {
    const at = inverse + ((<usize>(k * (bandwidth + 1))) << 4);
    const pair = k > 0 && bandwidth > 0;
    v128.store(pointer(job, Word.variances) + ((<usize>k) << 4), v128.load(at));
    v128.store(pointer(job, Word.covariancesBelow) + ((<usize>k) << 4), pair ? v128.load(at, 16) : spread<T>(0));
  }
}

/** Σ f_k P_k on every row, background not included: Word.model. */
export function modelLight<T extends number>(job: usize): void {
  const nWindow = windowRows(job);
  const model = pointer(job, Word.model);
  memory.fill(model, 0, (<usize>laneRows(job)) << 4);
  for (let k: i32 = 0; k < count(job, Word.nFibre); k++) {
    const flux = v128.load(pointer(job, Word.fluxes) + ((<usize>k) << 4));
    const own = windowWeights(job, k);
    const first = model + windowOffset(job, k);
    for (let at: usize = 0; at < (<usize>nWindow) << 4; at += 16) {
      v128.store(first + at, v128.add<T>(v128.load(first + at), v128.mul<T>(flux, v128.load(own + at))));
    }
  }
}

/** Where fibre k's weights begin. */
export function windowWeights(job: usize, k: i32): usize {
  return pointer(job, Word.weights) + ((<usize>k * <usize>windowRows(job)) << 4);
}

/** First row of fibre k's window, counted from the frame's row 0. */
export function windowStartOf(job: usize, k: i32): i32 {
  return load<i32>(pointer(job, Word.start) + ((<usize>k) << 2));
}

/** How many bytes into the lane rows fibre k's window begins. */
export function windowOffset(job: usize, k: i32): usize {
  return (<usize>(windowStartOf(job, k) + windowRows(job))) << 4;
}
