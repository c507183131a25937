/** Joint linearised centring of all fibres in a column, weighted by the variance of its own model. Light near fibre k, whose
 * centre is thought at y_k with width σ_k, is modelled as
 *
 *     a P(y − y_k) + u ∂P/∂y_k + s ∂P/∂σ_k,      u = a·δ (shift),  s = a·δσ (widening; only when nPar = 3)
 *
 * over a background Σ b_q P_q, Legendre in the row. P is the Gaussian integrated over pixels. Linear in (a, u, s) of
 * all fibres, neighbours within `neighbours` places coupled: a banded system bordered by the few background columns,
 * which are eliminated through their Schur complement. The twin is src/reference/centring.ts.
 *
 * A tile is two columns at once, one a lane; src/kernels/centring-words.ts draws the job.
 *
 *     unknowns of the band:   a_0 u_0 (s_0) a_1 u_1 (s_1) …      half-bandwidth nPar · (neighbours + 1) − 1 */
import { CentringNumber, CentringWord } from "../src/kernels/centring-words";
import { factorBand, inverseBand, solveBandSides } from "./banded";
import { erf } from "./erf";

const sqrtHalf: f64 = Math.SQRT1_2;
const inverseSqrtTwoPi: f64 = 0.3989422804014327;

function count(job: usize, word: CentringWord): i32 {
  return load<i32>(job + ((<usize>word) << 2));
}

function pointer(job: usize, word: CentringWord): usize {
  return <usize>load<u32>(job + ((<usize>word) << 2));
}

/** Where pair `pair` lies in an array of `nEntry` a pair. */
function ofPair(job: usize, word: CentringWord, pair: i32, nEntry: i32): usize {
  return pointer(job, word) + ((<usize>pair * <usize>nEntry) << 4);
}

function number(job: usize, which: CentringNumber): f64 {
  return load<f64>(pointer(job, CentringWord.numbers) + ((<usize>which) << 3));
}

/** Centres one pair of columns. An unknown without light comes out as 0, variance 0. */
export function centreColumns(job: usize, tile: i32): void {
  const pair = tile * count(job, CentringWord.pairStep);
  const model = ofPair(job, CentringWord.model, pair, count(job, CentringWord.nRow));
  const nRound = count(job, CentringWord.nRound);
  fillBasis(job, pair);
  for (let round = 1; round <= nRound; round++) {
    if (round == nRound && count(job, CentringWord.reject) != 0) rejectPixels(job, pair);
    setWeights(job, pair, model);
    solve(job, pair, round == nRound);
  }
  addMisfit(job, pair);
}

/** P, ∂P/∂y_k (and ∂P/∂σ_k) on each fibre's window of rows, 0 beyond the reach: basis[(k · nPar + p) · nWindow + i]. */
function fillBasis(job: usize, pair: i32): void {
  const nFibre = count(job, CentringWord.nFibre);
  const nPar = count(job, CentringWord.nPar);
  const nWindow = count(job, CentringWord.nWindow);
  const reach = f64x2.splat(number(job, CentringNumber.reach));
  const half = f64x2.splat(0.5);
  const planeBytes = (<usize>nWindow) << 4;
  const edges = pointer(job, CentringWord.edges);
  let centrePtr = ofPair(job, CentringWord.centre, pair, nFibre);
  let sigmaPtr = ofPair(job, CentringWord.sigma, pair, nFibre);
  let firstPtr = pointer(job, CentringWord.first);
  let planePtr = pointer(job, CentringWord.basis);
  for (let k: i32 = 0; k < nFibre; k++) {
    const centre = v128.load(centrePtr);
    const step = f64x2.div(f64x2.splat(1), v128.load(sigmaPtr));
    const between = 0.5 * (f64x2.extract_lane(centre, 0) + f64x2.extract_lane(centre, 1));
    const first = <i32>Math.floor(between + 0.5) - (nWindow >> 1);
    store<i32>(firstPtr, first);
    let low = f64x2.sub(f64x2.splat(<f64>first - 0.5), centre);
    fillDensities(low, step, nWindow, edges);
    let lowErf = erfPair(f64x2.mul(low, step));
    for (let at: usize = 0; at < planeBytes; at += 16) {
      const high = f64x2.add(low, f64x2.splat(1));
      const highErf = erfPair(f64x2.mul(high, step));
      const lowDensity = v128.load(edges + at);
      const highDensity = v128.load(edges + at, 16);
      const inside = f64x2.le(f64x2.abs(f64x2.add(low, half)), reach);
      v128.store(planePtr + at, v128.and(inside, f64x2.mul(half, f64x2.sub(highErf, lowErf))));
      v128.store(planePtr + planeBytes + at, v128.and(inside, f64x2.sub(lowDensity, highDensity)));
      if (nPar == 3) {
        const widening = f64x2.mul(step, f64x2.sub(f64x2.mul(low, lowDensity), f64x2.mul(high, highDensity)));
        v128.store(planePtr + 2 * planeBytes + at, v128.and(inside, widening));
      }
      low = high;
      lowErf = highErf;
    }
    centrePtr += 16;
    sigmaPtr += 16;
    firstPtr += 16;
    planePtr += planeBytes * <usize>nPar;
  }
}

/** The Gaussian's density at the pixels' edges, the first of them `low` pixels from the centre, h = 1/σ apart: outward from the
 * middle one, g(v ± h) = g(v) q with q = exp(∓v h − h²/2), which shrinks by exp(−h²) from step to step. */
function fillDensities(low: v128, h: v128, nWindow: i32, edges: usize): void {
  const middle = nWindow >> 1;
  const v = f64x2.mul(f64x2.add(low, f64x2.splat(<f64>middle)), h);
  const halfSquare = f64x2.mul(f64x2.splat(0.5), f64x2.mul(h, h));
  const shrink = expPair(f64x2.mul(f64x2.splat(-2), halfSquare));
  const start = f64x2.mul(
    f64x2.mul(f64x2.splat(inverseSqrtTwoPi), h),
    expPair(f64x2.mul(f64x2.splat(-0.5), f64x2.mul(v, v))),
  );
  let up = expPair(f64x2.neg(f64x2.add(f64x2.mul(v, h), halfSquare)));
  let down = f64x2.div(shrink, up);
  let g = start;
  v128.store(edges + ((<usize>middle) << 4), g);
  for (let i = middle + 1; i <= nWindow; i++) {
    g = f64x2.mul(g, up);
    up = f64x2.mul(up, shrink);
    v128.store(edges + ((<usize>i) << 4), g);
  }
  g = start;
  for (let i = middle - 1; i >= 0; i--) {
    g = f64x2.mul(g, down);
    down = f64x2.mul(down, shrink);
    v128.store(edges + ((<usize>i) << 4), g);
  }
}

function expPair(x: v128): v128 {
  return f64x2(Math.exp(f64x2.extract_lane(x, 0)), Math.exp(f64x2.extract_lane(x, 1)));
}

/** erf(v/√2) */
function erfPair(v: v128): v128 {
  return f64x2(erf(f64x2.extract_lane(v, 0) * sqrtHalf), erf(f64x2.extract_lane(v, 1) * sqrtHalf));
}

/** 1 / (fixed + perElectron · m + (ε m)²) of the model's light m ≥ 0, for good pixels near a fibre; 0 for others. */
function setWeights(job: usize, pair: i32, model: usize): void {
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
function rejectPixels(job: usize, pair: i32): void {
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

/** Weighted least squares with the weights set; solution, background and model, and on request variances. */
function solve(job: usize, pair: i32, withVariance: bool): void {
  const nPar = count(job, CentringWord.nPar);
  const nBack = count(job, CentringWord.nBack);
  const n = count(job, CentringWord.nFibre) * nPar;
  const b = nPar * (count(job, CentringWord.neighbours) + 1) - 1;
  const band = pointer(job, CentringWord.band);
  const sides = pointer(job, CentringWord.sides);
  const inverse = pointer(job, CentringWord.inverse);
  memory.fill(band, 0, (<usize>(n * (b + 1))) << 4);
  addFibres(job, ofPair(job, CentringWord.data, pair, count(job, CentringWord.nRow)));
  factorBand<f64>(band, n, b);
  if (withVariance) {
    inverseBand<f64>(band, n, b, inverse);
    const variance = ofPair(job, CentringWord.variance, pair, n);
    for (let i: usize = 0; i < <usize>n; i++) {
      v128.store(variance + (i << 4), v128.load(inverse + ((i * <usize>(b + 1)) << 4)));
    }
  }
  solveBandSides<f64>(band, n, b, sides, nBack + 1);
  setSchur(job, pair);
  const background = ofPair(job, CentringWord.background, pair, nBack);
  solveDense(pointer(job, CentringWord.schur), nBack, background);
  const solution = ofPair(job, CentringWord.solution, pair, n);
  const sideBytes = (<usize>(nBack + 1)) << 4;
  for (let i: usize = 0; i < <usize>n; i++) {
    const side = sides + i * sideBytes;
    let x = v128.load(side);
    for (let q: usize = 0; q < (<usize>nBack) << 4; q += 16) {
      x = f64x2.sub(x, f64x2.mul(v128.load(side + q, 16), v128.load(background + q)));
    }
    v128.store(solution + (i << 4), x);
  }
  evaluate(job, pair, solution, background);
}

/** The normal equations: Σ_rows weight · basis_i · basis_j into the band, and on the other side data and background. */
function addFibres(job: usize, dataPtr: usize): void {
  const nRow = count(job, CentringWord.nRow);
  const nPar = count(job, CentringWord.nPar);
  const nWindow = count(job, CentringWord.nWindow);
  const neighbours = count(job, CentringWord.neighbours);
  const firstPtr = pointer(job, CentringWord.first);
  const basis = pointer(job, CentringWord.basis);
  const weighted = pointer(job, CentringWord.weighted);
  const planeBytes = (<usize>nWindow) << 4;
  const fibreBytes = planeBytes * <usize>nPar;
  for (let k: i32 = 0; k < count(job, CentringWord.nFibre); k++) {
    const first = load<i32>(firstPtr + ((<usize>k) << 4));
    const from = max(0, first);
    const to = min(nRow, first + nWindow);
    weigh(job, basis + <usize>k * fibreBytes, first, from, to);
    for (let m = k; m >= max(0, k - neighbours); m--) {
      const other = load<i32>(firstPtr + ((<usize>m) << 4));
      const start = max(from, other);
      const length = max(0, min(to, other + nWindow) - start);
      const mine = weighted + ((<usize>(start - first)) << 4);
      const theirs = basis + <usize>m * fibreBytes + ((<usize>(start - other)) << 4);
      if (nPar == 3) dots3(mine, theirs, planeBytes, length, pointer(job, CentringWord.sums));
      else dots2(mine, theirs, planeBytes, length, pointer(job, CentringWord.sums));
      placeSums(job, k, m);
    }
    project(job, k, first, from, max(from, to), dataPtr);
  }
}

/** weight · basis on the rows of one fibre's window. */
function weigh(job: usize, basis: usize, first: i32, from: i32, to: i32): void {
  const planeBytes = (<usize>count(job, CentringWord.nWindow)) << 4;
  const weight = pointer(job, CentringWord.weight);
  const weighted = pointer(job, CentringWord.weighted);
  for (let p: usize = 0; p < <usize>count(job, CentringWord.nPar); p++) {
    for (let y = from; y < to; y++) {
      const at = p * planeBytes + ((<usize>(y - first)) << 4);
      v128.store(weighted + at, f64x2.mul(v128.load(weight + ((<usize>y) << 4)), v128.load(basis + at)));
    }
  }
}

/** All products of three planes with three, [3][3]. */
function dots3(a: usize, b: usize, planeBytes: usize, length: i32, outPtr: usize): void {
  let s00 = f64x2.splat(0);
  let s01 = s00;
  let s02 = s00;
  let s10 = s00;
  let s11 = s00;
  let s12 = s00;
  let s20 = s00;
  let s21 = s00;
  let s22 = s00;
  for (let i: i32 = 0; i < length; i++) {
    const b0 = v128.load(b);
    const b1 = v128.load(b + planeBytes);
    const b2 = v128.load(b + 2 * planeBytes);
    const a0 = v128.load(a);
    s00 = f64x2.add(s00, f64x2.mul(a0, b0));
    s01 = f64x2.add(s01, f64x2.mul(a0, b1));
    s02 = f64x2.add(s02, f64x2.mul(a0, b2));
    const a1 = v128.load(a + planeBytes);
    s10 = f64x2.add(s10, f64x2.mul(a1, b0));
    s11 = f64x2.add(s11, f64x2.mul(a1, b1));
    s12 = f64x2.add(s12, f64x2.mul(a1, b2));
    const a2 = v128.load(a + 2 * planeBytes);
    s20 = f64x2.add(s20, f64x2.mul(a2, b0));
    s21 = f64x2.add(s21, f64x2.mul(a2, b1));
    s22 = f64x2.add(s22, f64x2.mul(a2, b2));
    a += 16;
    b += 16;
  }
  v128.store(outPtr, s00);
  v128.store(outPtr, s01, 16);
  v128.store(outPtr, s02, 32);
  v128.store(outPtr, s10, 48);
  v128.store(outPtr, s11, 64);
  v128.store(outPtr, s12, 80);
  v128.store(outPtr, s20, 96);
  v128.store(outPtr, s21, 112);
  v128.store(outPtr, s22, 128);
}

/** All products of two planes with two, [2][2]. */
function dots2(a: usize, b: usize, planeBytes: usize, length: i32, outPtr: usize): void {
  let s00 = f64x2.splat(0);
  let s01 = s00;
  let s10 = s00;
  let s11 = s00;
  for (let i: i32 = 0; i < length; i++) {
    const b0 = v128.load(b);
    const b1 = v128.load(b + planeBytes);
    const a0 = v128.load(a);
    const a1 = v128.load(a + planeBytes);
    s00 = f64x2.add(s00, f64x2.mul(a0, b0));
    s01 = f64x2.add(s01, f64x2.mul(a0, b1));
    s10 = f64x2.add(s10, f64x2.mul(a1, b0));
    s11 = f64x2.add(s11, f64x2.mul(a1, b1));
    a += 16;
    b += 16;
  }
  v128.store(outPtr, s00);
  v128.store(outPtr, s01, 16);
  v128.store(outPtr, s10, 32);
  v128.store(outPtr, s11, 48);
}

/** Products of fibre k's terms with fibre m's to their places in the band. */
function placeSums(job: usize, k: i32, m: i32): void {
  const nPar = count(job, CentringWord.nPar);
  const rowEntries = nPar * (count(job, CentringWord.neighbours) + 1);
  const band = pointer(job, CentringWord.band);
  let from = pointer(job, CentringWord.sums);
  for (let i = k * nPar; i < (k + 1) * nPar; i++) {
    for (let j = m * nPar; j < (m + 1) * nPar; j++) {
      if (j <= i) v128.store(band + ((<usize>(i * rowEntries + i - j)) << 4), v128.load(from));
      from += 16;
    }
  }
}

/** Products of fibre k's weighted terms with the data and with each background term. */
function project(job: usize, k: i32, first: i32, from: i32, to: i32, dataPtr: usize): void {
  const nPar = count(job, CentringWord.nPar);
  const nBack = <usize>count(job, CentringWord.nBack);
  const planeBytes = (<usize>count(job, CentringWord.nWindow)) << 4;
  const rowBasis = pointer(job, CentringWord.rowBasis);
  for (let p: i32 = 0; p < nPar; p++) {
    const mine = pointer(job, CentringWord.weighted) + <usize>p * planeBytes;
    const i = <usize>(k * nPar + p);
    const side = pointer(job, CentringWord.sides) + ((i * (nBack + 1)) << 4);
    const border = pointer(job, CentringWord.border) + ((i * nBack) << 4);
    let sum = f64x2.splat(0);
    for (let y = from; y < to; y++) {
      const w = v128.load(mine + ((<usize>(y - first)) << 4));
      sum = f64x2.add(sum, f64x2.mul(w, v128.load(dataPtr + ((<usize>y) << 4))));
    }
    v128.store(side, sum);
    for (let q: usize = 0; q < nBack; q++) {
      sum = f64x2.splat(0);
      for (let y = from; y < to; y++) {
        const w = v128.load(mine + ((<usize>(y - first)) << 4));
        sum = f64x2.add(sum, f64x2.mul(w, v128.load64_splat(rowBasis + ((<usize>y * nBack + q) << 3))));
      }
      v128.store(border + (q << 4), sum);
      v128.store(side + (q << 4), sum, 16);
    }
  }
}

/** The background's own equations, nBack rows of nBack entries and the right-hand side, less what the fibres explain:
 * S − Cᵀ M⁻¹ C and r − Cᵀ M⁻¹ rhs. */
function setSchur(job: usize, pair: i32): void {
  const nRow = count(job, CentringWord.nRow);
  const nBack = <usize>count(job, CentringWord.nBack);
  const n = <usize>(count(job, CentringWord.nFibre) * count(job, CentringWord.nPar));
  const data = ofPair(job, CentringWord.data, pair, nRow);
  const weight = pointer(job, CentringWord.weight);
  const rowBasis = pointer(job, CentringWord.rowBasis);
  const border = pointer(job, CentringWord.border);
  const sides = pointer(job, CentringWord.sides);
  const schur = pointer(job, CentringWord.schur);
  for (let q: usize = 0; q < nBack; q++) {
    for (let r: usize = q; r <= nBack; r++) {
      let sum = f64x2.splat(0);
      for (let y: usize = 0; y < <usize>nRow; y++) {
        const row = rowBasis + ((y * nBack) << 3);
        const other = r < nBack ? v128.load64_splat(row + (r << 3)) : v128.load(data + (y << 4));
        const mine = f64x2.mul(v128.load(weight + (y << 4)), v128.load64_splat(row + (q << 3)));
        sum = f64x2.add(sum, f64x2.mul(mine, other));
      }
      const column = r < nBack ? r + 1 : 0;
      for (let i: usize = 0; i < n; i++) {
        const mine = v128.load(border + ((i * nBack + q) << 4));
        sum = f64x2.sub(sum, f64x2.mul(mine, v128.load(sides + ((i * (nBack + 1) + column) << 4))));
      }
      v128.store(schur + ((q * (nBack + 1) + r) << 4), sum);
      if (r < nBack) v128.store(schur + ((r * (nBack + 1) + q) << 4), sum);
    }
  }
}

/** Gauss elimination of the small positive system `ptr` (n rows of n + 1); a lost pivot drops its unknown. */
function solveDense(ptr: usize, n: i32, xPtr: usize): void {
  const rowBytes = (<usize>(n + 1)) << 4;
  for (let i: i32 = 0; i < n; i++) {
    const row = ptr + <usize>i * rowBytes;
    const inverse = inverseOfPositive(v128.load(row + ((<usize>i) << 4)));
    for (let j = i + 1; j < n; j++) {
      const below = ptr + <usize>j * rowBytes;
      const factor = f64x2.mul(v128.load(below + ((<usize>i) << 4)), inverse);
      for (let k: usize = (<usize>i) << 4; k < rowBytes; k += 16) {
        v128.store(below + k, f64x2.sub(v128.load(below + k), f64x2.mul(factor, v128.load(row + k))));
      }
    }
  }
  for (let i = n - 1; i >= 0; i--) {
    const row = ptr + <usize>i * rowBytes;
    let sum = v128.load(row + ((<usize>n) << 4));
    for (let k = i + 1; k < n; k++) {
      sum = f64x2.sub(sum, f64x2.mul(v128.load(row + ((<usize>k) << 4)), v128.load(xPtr + ((<usize>k) << 4))));
    }
    v128.store(xPtr + ((<usize>i) << 4), f64x2.mul(sum, inverseOfPositive(v128.load(row + ((<usize>i) << 4)))));
  }
}

function inverseOfPositive(x: v128): v128 {
  return v128.and(f64x2.div(f64x2.splat(1), x), f64x2.gt(x, f64x2.splat(0)));
}

/** Background and all fibres' terms on every row. */
function evaluate(job: usize, pair: i32, solution: usize, background: usize): void {
  const nRow = count(job, CentringWord.nRow);
  const nBack = <usize>count(job, CentringWord.nBack);
  const nPar = count(job, CentringWord.nPar);
  const nWindow = count(job, CentringWord.nWindow);
  const model = ofPair(job, CentringWord.model, pair, nRow);
  const firstPtr = pointer(job, CentringWord.first);
  let row = pointer(job, CentringWord.rowBasis);
  for (let y: usize = 0; y < <usize>nRow; y++) {
    let sum = f64x2.splat(0);
    for (let q: usize = 0; q < nBack; q++) {
      sum = f64x2.add(sum, f64x2.mul(v128.load(background + (q << 4)), v128.load64_splat(row)));
      row += 8;
    }
    v128.store(model + (y << 4), sum);
  }
  let basis = pointer(job, CentringWord.basis);
  for (let i: i32 = 0; i < count(job, CentringWord.nFibre) * nPar; i++) {
    const first = load<i32>(firstPtr + ((<usize>(i / nPar)) << 4));
    const x = v128.load(solution + ((<usize>i) << 4));
    for (let y = max(0, first); y < min(nRow, first + nWindow); y++) {
      const at = model + ((<usize>y) << 4);
      const light = f64x2.mul(x, v128.load(basis + ((<usize>(y - first)) << 4)));
      v128.store(at, f64x2.add(v128.load(at), light));
    }
    basis += (<usize>nWindow) << 4;
  }
}

/** Sums over the pixels in use: residual², variance of noise alone, light², and how many pixels and unknowns. */
function addMisfit(job: usize, pair: i32): void {
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
