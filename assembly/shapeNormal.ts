/** One column's normal equations for all coefficients of a shape and the background, its fibres' local unknowns eliminated
 * exactly: N = GᵀG − XᵀD⁻¹X with X = L⁻¹ AᵀG, where A = fibres' local unknowns, AᵀA = L D Lᵀ, everything over the pixels'
 * noise. src/reference/shapeNormal.ts is the same, written to be read.
 *
 * Of the shape's seven terms four are left in a column (shapeProfiles.ts), so that a spline's unknowns are one block of
 * rankUpdate.ts. Two blocks more hold the background in y and the residual, whose products are the right-hand side
 * (shapeDesign.ts draws a row). */
import { factorBand } from "./banded";
import { bandwidthOf, fillLocalDesign, fillSystem, localFrom, localTo } from "./localSystem";
import { blocksBytes, rankUpdate } from "./rankUpdate";
import { leaveResidual, settleColumns } from "./shapeColumn";
import { fillDesign } from "./shapeDesign";
import { columnOf, count, firstOf, nLane, number, pointer, rowOf, ShapeNumbers, ShapeWord } from "./shapeJob";

/** Fills ShapeWord.normal and chi2 of two columns; their fluxes, models and inverse variances on the way. */
export function shapeNormals(job: usize, tile: i32): void {
  settleColumns(job, tile);
  const nPar = count(job, ShapeWord.nPar);
  for (let lane: i32 = 0; lane < nLane; lane++) {
    const column = columnOf(job, tile, lane);
    leaveResidual(job, column, lane);
    judgePixels(job, column, lane);
    fillLocalDesign(job, column, lane, nPar);
    fillSystem(job, lane, nPar);
  }
  factorBand<f64>(pointer(job, ShapeWord.band), nPar * count(job, ShapeWord.nFibre), bandwidthOf(job, nPar));
  for (let lane: i32 = 0; lane < nLane; lane++) {
    const column = columnOf(job, tile, lane);
    if (lane > 0 && column < nLane * tile + lane) break; // the last column once more
    const nBlock = count(job, ShapeWord.nSpline) + 2;
    const normal = pointer(job, ShapeWord.normal) + <usize>column * blocksBytes(nBlock);
    memory.fill(normal, 0, blocksBytes(nBlock));
    fillDesign(job, column, lane);
    rankUpdate(
      pointer(job, ShapeWord.design),
      count(job, ShapeWord.ny),
      nBlock,
      1.0,
      normal,
      pointer(job, ShapeWord.filled),
    );
    crossProducts(job, lane);
    eliminate(job, lane);
    rankUpdate(
      pointer(job, ShapeWord.cross),
      nPar * count(job, ShapeWord.nFibre),
      nBlock,
      -1.0,
      normal,
      pointer(job, ShapeWord.filled),
    );
  }
}

/** Leaves out pixels whose residual is beyond the clip; χ² and number of the others. */
function judgePixels(job: usize, column: i32, lane: i32): void {
  const ny = count(job, ShapeWord.ny);
  const clip = number(job, ShapeNumbers.clip);
  const most = clip > 0.0 ? clip * clip : Infinity;
  const inverseVariance = rowOf(job, ShapeWord.inverseVariance, column, ny);
  const rootWeight = rowOf(job, ShapeWord.rootWeight, lane, ny);
  const scaled = rowOf(job, ShapeWord.scaled, lane, ny);
  let chi2: f64 = 0.0;
  let nGood: f64 = 0.0;
  for (let at: usize = 0; at < (<usize>ny) << 3; at += 8) {
    const pull = load<f64>(scaled + at);
    if (pull * pull > most) {
      store<f64>(inverseVariance + at, 0.0);
      store<f64>(rootWeight + at, 0.0);
      store<f64>(scaled + at, 0.0);
      continue;
    }
    chi2 += pull * pull;
    if (load<f64>(inverseVariance + at) > 0.0) nGood += 1.0;
  }
  const out = rowOf(job, ShapeWord.chi2, column, 2);
  store<f64>(out, chi2);
  store<f64>(out, nGood, 8);
}

/** AᵀG: local unknowns × unknowns and residual. */
function crossProducts(job: usize, lane: i32): void {
  const nFibre = count(job, ShapeWord.nFibre);
  const nPar = count(job, ShapeWord.nPar);
  const n = count(job, ShapeWord.nWindow);
  const rowBytes = (<usize>(count(job, ShapeWord.nSpline) + 2)) << 5;
  const parBytes = (<usize>n) << 3;
  let own = rowOf(job, ShapeWord.local, lane, nFibre * nPar * n);
  let out = pointer(job, ShapeWord.cross);
  for (let k: i32 = 0; k < nFibre; k++) {
    const first = load<i32>(firstOf(job, lane) + ((<usize>k) << 2));
    const from = localFrom(job, first);
    const nRow = localTo(job, first) - from;
    const g = pointer(job, ShapeWord.design) + <usize>(first + from) * rowBytes;
    const a = own + ((<usize>from) << 3);
    for (let at: usize = 0; at < rowBytes; at += 32) {
      if (nPar == 3) threeProducts(a, parBytes, g + at, nRow, rowBytes, out + at);
      else
        for (let p: usize = 0; p < <usize>nPar; p++)
          oneProduct(a + p * parBytes, g + at, nRow, rowBytes, out + p * rowBytes + at);
    }
    own += <usize>nPar * parBytes;
    out += <usize>nPar * rowBytes;
  }
}

function threeProducts(a: usize, parBytes: usize, g: usize, nRow: i32, rowBytes: usize, out: usize): void {
  let s0 = f64x2.splat(0.0);
  let s1 = s0;
  let s2 = s0;
  let s3 = s0;
  let s4 = s0;
  let s5 = s0;
  const b = a + parBytes;
  const c = b + parBytes;
  for (let at: usize = 0; at < (<usize>max(nRow, 0)) << 3; at += 8) {
    const low = v128.load(g);
    const high = v128.load(g, 16);
    let own = v128.load64_splat(a + at);
    s0 = f64x2.add(s0, f64x2.mul(own, low));
    s1 = f64x2.add(s1, f64x2.mul(own, high));
    own = v128.load64_splat(b + at);
    s2 = f64x2.add(s2, f64x2.mul(own, low));
    s3 = f64x2.add(s3, f64x2.mul(own, high));
    own = v128.load64_splat(c + at);
    s4 = f64x2.add(s4, f64x2.mul(own, low));
    s5 = f64x2.add(s5, f64x2.mul(own, high));
    g += rowBytes;
  }
  v128.store(out, s0);
  v128.store(out, s1, 16);
  v128.store(out + rowBytes, s2);
  v128.store(out + rowBytes, s3, 16);
  v128.store(out + 2 * rowBytes, s4);
  v128.store(out + 2 * rowBytes, s5, 16);
}

function oneProduct(a: usize, g: usize, nRow: i32, rowBytes: usize, out: usize): void {
  let low = f64x2.splat(0.0);
  let high = low;
  for (let at: usize = 0; at < (<usize>max(nRow, 0)) << 3; at += 8) {
    const own = v128.load64_splat(a + at);
    low = f64x2.add(low, f64x2.mul(own, v128.load(g)));
    high = f64x2.add(high, f64x2.mul(own, v128.load(g, 16)));
    g += rowBytes;
  }
  v128.store(out, low);
  v128.store(out, high, 16);
}

/** X = D^(−1/2) L⁻¹ · cross, in place, from one lane of the factors. */
function eliminate(job: usize, lane: i32): void {
  const nPar = count(job, ShapeWord.nPar);
  const n = nPar * count(job, ShapeWord.nFibre);
  const b = bandwidthOf(job, nPar);
  const rowBytes = (<usize>(count(job, ShapeWord.nSpline) + 2)) << 5;
  const bandBytes = (<usize>(b + 1)) << 4;
  const cross = pointer(job, ShapeWord.cross);
  const band = pointer(job, ShapeWord.band) + ((<usize>lane) << 3);
  for (let i: i32 = 1; i < n; i++) {
    takeEarlier(cross + <usize>i * rowBytes, rowBytes, band + <usize>i * bandBytes, (<usize>min(i, b)) << 4);
  }
  for (let i: i32 = 0; i < n; i++) {
    const row = cross + <usize>i * rowBytes;
    const root = f64x2.splat(sqrt(max(load<f64>(band + <usize>i * bandBytes), 0.0)));
    for (let at: usize = 0; at < rowBytes; at += 16) v128.store(row + at, f64x2.mul(root, v128.load(row + at)));
  }
}

/** row −= Σ_j l_j · (j-th row before it), eight unknowns at a time and then four. `reach`: bytes of the factors. */
function takeEarlier(row: usize, rowBytes: usize, factors: usize, reach: usize): void {
  let at: usize = 0;
  for (; at + 64 <= rowBytes; at += 64) {
    let s0 = v128.load(row + at);
    let s1 = v128.load(row + at, 16);
    let s2 = v128.load(row + at, 32);
    let s3 = v128.load(row + at, 48);
    let there = row + at;
    for (let j: usize = 16; j <= reach; j += 16) {
      there -= rowBytes;
      const l = v128.load64_splat(factors + j);
      s0 = f64x2.sub(s0, f64x2.mul(l, v128.load(there)));
      s1 = f64x2.sub(s1, f64x2.mul(l, v128.load(there, 16)));
      s2 = f64x2.sub(s2, f64x2.mul(l, v128.load(there, 32)));
      s3 = f64x2.sub(s3, f64x2.mul(l, v128.load(there, 48)));
    }
    v128.store(row + at, s0);
    v128.store(row + at, s1, 16);
    v128.store(row + at, s2, 32);
    v128.store(row + at, s3, 48);
  }
  for (; at < rowBytes; at += 16) {
    let sum = v128.load(row + at);
    let there = row + at;
    for (let j: usize = 16; j <= reach; j += 16) {
      there -= rowBytes;
      sum = f64x2.sub(sum, f64x2.mul(v128.load64_splat(factors + j), v128.load(there)));
    }
    v128.store(row + at, sum);
  }
}
