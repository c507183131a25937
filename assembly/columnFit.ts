/** Fit of sampled columns, a group of four in f32 lanes: every fibre's flux jointly, and on request its shift, and the normal
 * equations of a smooth background with the fluxes eliminated. src/reference/columnFit.ts is the readable twin.
 *
 * Windows are as wide as the profile; the normal equations look at its core alone, and rounds of them on what the whole model
 * leaves come to the full solution: the wings' share of the light is left over, then its square, and so on. */
import { ColumnNumber, ColumnWord } from "../src/kernels/columnFit-words";
import { backgroundNormal } from "./backgroundNormal";
import { factorBand, solveBand } from "./banded";
import { spread } from "./lanes";
import { legendreBasis } from "./legendre";
import { localShifts } from "./localShift";
import { tableProfiles } from "./tableProfile";
import { count, pointer } from "./words";

export { count, pointer } from "./words";

/** Rows over which light may be displaced by a misfit of the profile. */
const reachRows: i32 = 2;

export function number(job: usize, which: ColumnNumber): f64 {
  return load<f64>(pointer(job, ColumnWord.numbers) + ((<usize>which) << 3));
}

/** Lane rows beyond each end of the frame. */
export function marginRows(job: usize): i32 {
  return count(job, ColumnWord.nWindow) + 2;
}

/** Bytes from a window's first row to its core's. */
export function coreOffset(job: usize): usize {
  return (<usize>((count(job, ColumnWord.nWindow) - count(job, ColumnWord.nCore)) >> 1)) << 4;
}

/** How many bytes into the lane rows the window of fibre k begins. */
export function windowOffset(job: usize, k: i32): usize {
  return (<usize>(load<i32>(pointer(job, ColumnWord.start) + ((<usize>k) << 2)) + marginRows(job))) << 4;
}

/** Fits the group that tile `tile` stands for. */
export function fitColumns(job: usize, tile: i32): void {
  const group = load<i32>(pointer(job, ColumnWord.groups) + ((<usize>tile) << 2));
  const x0 = load<i32>(pointer(job, ColumnWord.firstColumn) + ((<usize>group) << 2));
  const nFibre = count(job, ColumnWord.nFibre);
  tableProfiles(job, x0);
  loadRows(job, group, x0);
  const flux = pointer(job, ColumnWord.flux) + ((<usize>group * <usize>nFibre) << 4);
  memory.fill(flux, 0, (<usize>nFibre) << 4);
  for (let round: i32 = 0; round < count(job, ColumnWord.nRound); round++) {
    weigh(job, group, round == 0 ? ColumnWord.level : ColumnWord.model, round > 1);
    normalEquations(job);
    factorBand<f32>(pointer(job, ColumnWord.band), nFibre, count(job, ColumnWord.bandwidth));
    solveBand<f32>(
      pointer(job, ColumnWord.band),
      nFibre,
      count(job, ColumnWord.bandwidth),
      pointer(job, ColumnWord.step),
    );
    takeStep(job, flux);
  }
  if (count(job, ColumnWord.wantShift)) localShifts(job, group, flux);
  if (count(job, ColumnWord.wantBackground)) backgroundNormal(job, group);
  const residual = pointer(job, ColumnWord.residual);
  if (residual == 0) return;
  const bytes = (<usize>count(job, ColumnWord.ny)) << 4;
  memory.copy(residual + <usize>group * bytes, frameRows(job, ColumnWord.rest), bytes);
}

/** The rows of the frame among the lane rows. */
export function frameRows(job: usize, word: ColumnWord): usize {
  return pointer(job, word) + ((<usize>marginRows(job)) << 4);
}

/** Background, and light less background; beyond the frame there is neither, nor a weight. */
function loadRows(job: usize, group: i32, x0: i32): void {
  const ny = count(job, ColumnWord.ny);
  const nY = count(job, ColumnWord.nY);
  const bytes = (<usize>(ny + 2 * marginRows(job))) << 4;
  memory.fill(pointer(job, ColumnWord.level), 0, bytes);
  memory.fill(pointer(job, ColumnWord.under), 0, bytes);
  memory.fill(pointer(job, ColumnWord.model), 0, bytes);
  memory.fill(pointer(job, ColumnWord.inverseVariance), 0, bytes);
  const series = pointer(job, ColumnWord.seriesLanes);
  backgroundSeries(job, x0, series);
  const light = pointer(job, ColumnWord.light) + ((<usize>group * <usize>ny) << 4);
  const level = frameRows(job, ColumnWord.level);
  const under = frameRows(job, ColumnWord.under);
  let polynomials = pointer(job, ColumnWord.rowPolynomials);
  for (let at: usize = 0; at < (<usize>ny) << 4; at += 16) {
    let sum = spread<f32>(0);
    for (let j: i32 = 0; j < nY; j++) {
      const p = v128.load32_splat(polynomials + ((<usize>j) << 2));
      sum = f32x4.add(sum, f32x4.mul(p, v128.load(series + ((<usize>j) << 4))));
    }
    polynomials += (<usize>nY) << 2;
    v128.store(under + at, sum);
    const seen = v128.load(light + at);
    v128.store(level + at, v128.and(f32x4.sub(seen, sum), f32x4.eq(seen, seen)));
  }
  memory.copy(pointer(job, ColumnWord.rest), pointer(job, ColumnWord.level), bytes);
}

/** Coefficients of b(x, ·) in every lane. */
function backgroundSeries(job: usize, x0: i32, series: usize): void {
  const nX = count(job, ColumnWord.nX);
  const nY = count(job, ColumnWord.nY);
  const basis = pointer(job, ColumnWord.series);
  for (let lane: i32 = 0; lane < 4; lane++) {
    legendreBasis(columnArgument(job, <f64>(x0 + lane)), nX, basis);
    for (let j: i32 = 0; j < nY; j++) {
      let sum: f64 = 0.0;
      for (let i: i32 = 0; i < nX; i++) {
        const c = load<f64>(pointer(job, ColumnWord.background) + ((<usize>(i * nY + j)) << 3));
        sum += load<f64>(basis + ((<usize>i) << 3)) * c;
      }
      store<f32>(series + ((<usize>j) << 4) + ((<usize>lane) << 2), <f32>sum);
    }
  }
}

/** Column x on [−1, 1]; a single column sits at 0. */
export function columnArgument(job: usize, x: f64): f64 {
  const nx = count(job, ColumnWord.nx);
  return nx > 1 ? (2.0 * x) / <f64>(nx - 1) - 1.0 : 0.0;
}

/** Inverse variances for the light in lane rows `word`; pixels that the fit misses by too much go out with their neighbours
 * when `clip` says so. */
function weigh(job: usize, group: i32, word: ColumnWord, clip: bool): void {
  const ny = <usize>count(job, ColumnWord.ny);
  const from = frameRows(job, word);
  const under = frameRows(job, ColumnWord.under);
  const light = pointer(job, ColumnWord.light) + ((<usize>group * ny) << 4);
  const bands = pointer(job, ColumnWord.bandOfRow);
  const fixed =
    pointer(job, ColumnWord.fixed) + ((<usize>group * (bands ? <usize>count(job, ColumnWord.nBand) : ny)) << 4);
  const perElectron = pointer(job, ColumnWord.perElectron);
  const perRow = perElectron + ((<usize>group * ny) << 4);
  const ivar = frameRows(job, ColumnWord.inverseVariance);
  const share = spread<f32>(number(job, ColumnNumber.profileError));
  const zero = spread<f32>(0);
  const one = spread<f32>(1);
  for (let at: usize = 0; at < ny << 4; at += 16) {
    const expected = v128.load(from + at);
    let reach = expected;
    for (let j: usize = 16; j <= (<usize>reachRows) << 4; j += 16) {
      reach = f32x4.pmax(f32x4.pmax(reach, v128.load(from + at - j)), v128.load(from + at + j));
    }
    const slack = f32x4.mul(share, f32x4.pmax(reach, zero));
    let photons = f32x4.pmax(f32x4.add(expected, v128.load(under + at)), zero);
    if (perElectron) photons = f32x4.mul(photons, v128.load(perRow + at));
    const fixedAt = fixed + (bands ? (<usize>load<u8>(bands + (at >> 4))) << 4 : at);
    const variance = f32x4.add(f32x4.add(v128.load(fixedAt), photons), f32x4.mul(slack, slack));
    const seen = v128.load(light + at);
    v128.store(ivar + at, v128.and(f32x4.div(one, variance), f32x4.eq(seen, seen)));
  }
  if (clip && number(job, ColumnNumber.clipSquared) > 0) dropOutliers(job);
}

function dropOutliers(job: usize): void {
  const ivar = frameRows(job, ColumnWord.inverseVariance);
  const rest = frameRows(job, ColumnWord.rest);
  const limit = spread<f32>(number(job, ColumnNumber.clipSquared));
  const end = (<usize>count(job, ColumnWord.ny)) << 4;
  let below = spread<f32>(0);
  let here = beyond(rest, ivar, limit);
  for (let at: usize = 0; at < end; at += 16) {
    const above = beyond(rest + at + 16, ivar + at + 16, limit); // weight 0 beyond the frame
    v128.store(ivar + at, v128.andnot(v128.load(ivar + at), v128.or(v128.or(below, here), above)));
    below = here;
    here = above;
  }
}

function beyond(rest: usize, ivar: usize, limit: v128): v128 {
  const miss = v128.load(rest);
  return f32x4.gt(f32x4.mul(f32x4.mul(miss, miss), v128.load(ivar)), limit);
}

/** Band and right-hand side of the fluxes' corrections, from the cores of the windows. */
function normalEquations(job: usize): void {
  const nWindow = <usize>count(job, ColumnWord.nWindow);
  const coreBytes = (<usize>count(job, ColumnWord.nCore)) << 4;
  const bandwidth = count(job, ColumnWord.bandwidth);
  const core = coreOffset(job);
  const weighted = pointer(job, ColumnWord.weighted);
  let bandAt = pointer(job, ColumnWord.band);
  const step = pointer(job, ColumnWord.step);
  for (let k: i32 = 0; k < count(job, ColumnWord.nFibre); k++) {
    const own = pointer(job, ColumnWord.weights) + ((<usize>k * nWindow) << 4) + core;
    const first = windowOffset(job, k) + core;
    const ivar = pointer(job, ColumnWord.inverseVariance) + first;
    const rest = pointer(job, ColumnWord.rest) + first;
    let rhs = spread<f32>(0);
    let square = spread<f32>(0);
    for (let at: usize = 0; at < coreBytes; at += 16) {
      const p = v128.load(own + at);
      const u = f32x4.mul(p, v128.load(ivar + at));
      v128.store(weighted + at, u);
      rhs = f32x4.add(rhs, f32x4.mul(u, v128.load(rest + at)));
      square = f32x4.add(square, f32x4.mul(u, p));
    }
    v128.store(step + ((<usize>k) << 4), rhs);
    v128.store(bandAt, square);
    for (let d: i32 = 1; d <= bandwidth; d++) {
      bandAt += 16;
      v128.store(bandAt, d <= k ? shared(job, k, d, weighted, own - ((<usize>d * nWindow) << 4)) : spread<f32>(0));
    }
    bandAt += 16;
  }
}

/** Σ over the rows that the cores of fibres k and k − d share. `ofK`, `ofOther`: at their cores' first rows. */
export function shared(job: usize, k: i32, d: i32, ofK: usize, ofOther: usize): v128 {
  const ahead = windowOffset(job, k) - windowOffset(job, k - d);
  const coreBytes = (<usize>count(job, ColumnWord.nCore)) << 4;
  let sum = spread<f32>(0);
  if (ahead >= coreBytes) return sum; // backwards lines wrap to huge numbers
  const end = coreBytes - ahead;
  for (let at: usize = 0; at < end; at += 16) {
    sum = f32x4.add(sum, f32x4.mul(v128.load(ofK + at), v128.load(ofOther + ahead + at)));
  }
  return sum;
}

/** Fluxes corrected, and the whole model of them taken off. */
function takeStep(job: usize, flux: usize): void {
  const nFibre = count(job, ColumnWord.nFibre);
  const windowBytes = (<usize>count(job, ColumnWord.nWindow)) << 4;
  const bytes = (<usize>(count(job, ColumnWord.ny) + 2 * marginRows(job))) << 4;
  const step = pointer(job, ColumnWord.step);
  const model = pointer(job, ColumnWord.model);
  let own = pointer(job, ColumnWord.weights);
  for (let k: i32 = 0; k < nFibre; k++) {
    const change = v128.load(step + ((<usize>k) << 4));
    const at = flux + ((<usize>k) << 4);
    v128.store(at, f32x4.add(v128.load(at), change));
    const rows = model + windowOffset(job, k);
    for (let i: usize = 0; i < windowBytes; i += 16) {
      v128.store(rows + i, f32x4.add(v128.load(rows + i), f32x4.mul(change, v128.load(own + i))));
    }
    own += windowBytes;
  }
  const level = pointer(job, ColumnWord.level);
  const rest = pointer(job, ColumnWord.rest);
  for (let at: usize = 0; at < bytes; at += 16) {
    v128.store(rest + at, f32x4.sub(v128.load(level + at), v128.load(model + at)));
  }
}
