/** Weights of the pixels of a pair of columns from the model of their light; which are left out; and how well the model fits. The
 * twin is src/reference/centring.ts. */
import { CentringNumber, CentringWord } from "../src/kernels/centring-words";
import { count, number, ofPair, pointer } from "./centringJob";

/** 1 / (fixed + perElectron · m + (ε m)²) of the model's light m ≥ 0, for good pixels near a fibre; 0 for others. */
export function setWeights(job: usize, pair: i32, model: usize): void {
  const nRow = count(job, CentringWord.nRow);
  const bytes = (<usize>nRow) << 4;
  const weight = pointer(job, CentringWord.weight);
  const good = ofPair(job, CentringWord.good, pair, nRow);
  markNear(job, pair, weight);
  for (let at: usize = 0; at < bytes; at += 16) {
    const variance = varianceAt(job, pair, at, v128.load(model + at), number(job, CentringNumber.relativeError));
    const use = f64x2.mul(v128.load(weight + at), v128.load(good + at));
    v128.store(weight + at, f64x2.div(use, variance));
  }
}

/** 1 for the rows at most `near` from a centre, 0 for others. */
function markNear(job: usize, pair: i32, outPtr: usize): void {
  const nRow = count(job, CentringWord.nRow);
  const nFibre = count(job, CentringWord.nFibre);
  const near = number(job, CentringNumber.near);
  const centre = ofPair(job, CentringWord.centre, pair, nFibre);
  memory.fill(outPtr, 0, (<usize>nRow) << 4);
  for (let i: usize = 0; i < (<usize>nFibre) << 1; i++) {
    const y = load<f64>(centre + (i << 3));
    const to = min(nRow - 1, <i32>Math.floor(y + near));
    const lane = outPtr + ((i & 1) << 3);
    for (let row = max(0, <i32>Math.ceil(y - near)); row <= to; row++) store<f64>(lane + ((<usize>row) << 4), 1.0);
  }
}

function varianceAt(job: usize, pair: i32, at: usize, model: v128, relativeError: f64): v128 {
  const nRow = count(job, CentringWord.nRow);
  const light = f64x2.pmax(f64x2.splat(0), model);
  const own = f64x2.mul(light, f64x2.splat(relativeError));
  const photons = f64x2.mul(light, v128.load(ofPair(job, CentringWord.variancePerElectron, pair, nRow) + at));
  const fixed = v128.load(ofPair(job, CentringWord.fixedVariance, pair, nRow) + at);
  return f64x2.add(f64x2.add(fixed, photons), f64x2.mul(own, own));
}

/** Marks pixels far off the model; what stands next to bright pixels may stray by a share of those. */
export function rejectPixels(job: usize, pair: i32): void {
  const nRow = count(job, CentringWord.nRow);
  const bytes = (<usize>nRow) << 4;
  const data = ofPair(job, CentringWord.data, pair, nRow);
  const model = ofPair(job, CentringWord.model, pair, nRow);
  const good = ofPair(job, CentringWord.good, pair, nRow);
  const kappa = number(job, CentringNumber.kappa);
  const half = f64x2.splat(0.5);
  for (let at: usize = 0; at < bytes; at += 16) {
    let beside = v128.load(model + at);
    const off = f64x2.sub(v128.load(data + at), beside);

    if (at > 0) beside = f64x2.pmax(beside, f64x2.mul(half, v128.load(model + at - 16)));
    if (at + 16 < bytes) beside = f64x2.pmax(beside, f64x2.mul(half, v128.load(model + at, 16)));
    const variance = varianceAt(job, pair, at, beside, number(job, CentringNumber.rejectError));
    const kept = f64x2.le(f64x2.mul(off, off), f64x2.mul(f64x2.splat(kappa * kappa), variance));
    v128.store(good + at, v128.and(v128.load(good + at), kept));
  }
}

/** Sums over the pixels in use: residual², variance of noise alone, light², and how many pixels and unknowns. */
export function addMisfit(job: usize, pair: i32): void {
  const nRow = count(job, CentringWord.nRow);
  const nBack = count(job, CentringWord.nBack);
  const n = count(job, CentringWord.nFibre) * count(job, CentringWord.nPar);
  const data = ofPair(job, CentringWord.data, pair, nRow);
  const model = ofPair(job, CentringWord.model, pair, nRow);
  const weight = pointer(job, CentringWord.weight);
  const zero = f64x2.splat(0);
  const one = f64x2.splat(1);
  let residual = zero;
  let noise = zero;
  let light = zero;
  let nPixel = zero;
  for (let at: usize = 0; at < (<usize>nRow) << 4; at += 16) {
    const inUse = f64x2.ne(v128.load(weight + at), zero);
    const here = v128.load(model + at);
    const off = f64x2.sub(v128.load(data + at), here);
    const bright = f64x2.pmax(zero, here);
    residual = f64x2.add(residual, v128.and(inUse, f64x2.mul(off, off)));
    noise = f64x2.add(noise, v128.and(inUse, varianceAt(job, pair, at, here, 0)));
    light = f64x2.add(light, v128.and(inUse, f64x2.mul(bright, bright)));
    nPixel = f64x2.add(nPixel, v128.and(inUse, one));
  }
  const solution = ofPair(job, CentringWord.solution, pair, n);
  let nUnknown = f64x2.splat(<f64>nBack);
  for (let i: usize = 0; i < <usize>n; i++) {
    nUnknown = f64x2.add(nUnknown, v128.and(f64x2.ne(v128.load(solution + (i << 4)), zero), one));
  }
  const out = ofPair(job, CentringWord.misfit, pair, 5);
  v128.store(out, residual);
  v128.store(out, noise, 16);
  v128.store(out, light, 32);
  v128.store(out, nPixel, 48);
  v128.store(out, nUnknown, 64);
}
