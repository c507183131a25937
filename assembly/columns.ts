/** Columns in and out: a group of neighbouring columns from the frame into lane rows, its spectra back into the images. */
import { Flag, MaskBit } from "../src/reference/bits";
import { suspects } from "./cosmic";
import { count, laneRows, pointer, Word, windowRows } from "./job";
import { windowOffset, windowStartOf, windowWeights } from "./joint";
import { laneAt, laneCount, lanesWithout, loadBits, loadPixels, loadSpread, spread } from "./lanes";
import { legendreValue } from "./legendre";

const outside: u32 = 0x01010101 * MaskBit.missing;

/** P_j(y) for every row of the frame: Word.rowPolynomials. */
export function prepareRowPolynomials<T extends number>(job: usize): void {
  const ny = count(job, Word.ny);
  const nY = count(job, Word.nBackgroundY);
  let at = pointer(job, Word.rowPolynomials);
  for (let y: i32 = 0; y < ny; y++) {
    const t: f64 = ny > 1 ? (2.0 * <f64>y) / <f64>(ny - 1) - 1.0 : 0.0;
    let below: f64 = 1.0;
    let here: f64 = t;
    for (let j: i32 = 0; j < nY; j++) {
      store<T>(at, j == 0 ? <T>1 : <T>here);
      at += sizeof<T>();
      if (j == 0) continue;
      const above: f64 = (<f64>(2 * j + 1) * t * here - <f64>j * below) / <f64>(j + 1);
      below = here;
      here = above;
    }
  }
}

/** Lane rows of the `nValid` columns from `x` on: bits, light without background, and what makes the variance. */
export function loadGroup<T extends number>(job: usize, x: i32, nValid: i32): void {
  const margin = windowRows(job);
  const ny = count(job, Word.ny);
  prepareBackgroundSeries<T>(job, x);
  for (let row: i32 = 0; row < margin; row++) clearRow<T>(job, row);
  for (let row: i32 = margin + ny; row < laneRows(job); row++) clearRow<T>(job, row);
  for (let y: i32 = 0; y < ny; y++) loadRow<T>(job, x, y, nValid);
}

function clearRow<T extends number>(job: usize, row: i32): void {
  const at = (<usize>row) << 4;
  store<u32>(pointer(job, Word.bits) + ((<usize>row) << 2), outside);
  v128.store(pointer(job, Word.light) + at, spread<T>(0));
  v128.store(pointer(job, Word.backgroundRows) + at, spread<T>(0));
  v128.store(pointer(job, Word.fixed) + at, spread<T>(1));
  v128.store(pointer(job, Word.inverseResponseRows) + at, spread<T>(0));
  v128.store(pointer(job, Word.responseVarianceRows) + at, spread<T>(0));
}

function loadRow<T extends number>(job: usize, x: i32, y: i32, nValid: i32): void {
  const row = windowRows(job) + y;
  const at = (<usize>row) << 4;
  const pixel = <usize>y * <usize>count(job, Word.nx) + <usize>x;
  const kept: u32 = 0x01010101 * (MaskBit.cosmic | MaskBit.grown);
  let bits = loadBits<T>(pointer(job, Word.mask) + pixel, nValid, MaskBit.missing);
  bits |= loadBits<T>(pointer(job, Word.rejected) + pixel, nValid, 0) & kept;
  store<u32>(pointer(job, Word.bits) + ((<usize>row) << 2), bits);
  const background = backgroundOn<T>(job, y);
  const electrons = loadPixels<T>(pointer(job, Word.electrons) + (pixel << 2), nValid);
  v128.store(pointer(job, Word.backgroundRows) + at, background);
  v128.store(pointer(job, Word.light) + at, v128.and(v128.sub<T>(electrons, background), lanesWithout<T>(bits)));
  v128.store(pointer(job, Word.fixed) + at, fixedVariance<T>(job, x, y, pixel, nValid));
  v128.store(
    pointer(job, Word.inverseResponseRows) + at,
    imageOr<T>(pointer(job, Word.inverseResponse), pixel, nValid, 1),
  );
  v128.store(
    pointer(job, Word.responseVarianceRows) + at,
    imageOr<T>(pointer(job, Word.responseRelativeVariance), pixel, nValid, 0),
  );
}

/** Lanes past the frame's last column get 1, so that nothing divides by 0 there. */
function fixedVariance<T extends number>(job: usize, x: i32, y: i32, pixel: usize, nValid: i32): v128 {
  const image = pointer(job, Word.fixedVarianceImage);
  const band = <usize>load<u8>(pointer(job, Word.bandOfRow) + <usize>y) * <usize>count(job, Word.nx) + <usize>x;
  const table = pointer(job, Word.fixedVariance) + (band << 2);
  const fixed = loadPixels<T>(image ? image + (pixel << 2) : table, nValid);
  return nValid == laneCount<T>() ? fixed : v128.bitselect(fixed, spread<T>(1), v128.gt<T>(fixed, spread<T>(0)));
}

function imageOr<T extends number>(image: usize, pixel: usize, nValid: i32, otherwise: f64): v128 {
  return image ? loadPixels<T>(image + (pixel << 2), nValid) : spread<T>(otherwise);
}

/** Coefficients of b(x, ·) in P_j(y) for every lane: Word.backgroundSeries, v128 an order, of T. */
function prepareBackgroundSeries<T extends number>(job: usize, x: i32): void {
  const nX = count(job, Word.nBackgroundX);
  const nY = count(job, Word.nBackgroundY);
  const nx = count(job, Word.nx);
  const series = pointer(job, Word.backgroundSeries);
  const column = series + ((<usize>nY) << 4);
  for (let j: i32 = 0; j < nY; j++) {
    for (let i: i32 = 0; i < nX; i++) {
      store<f64>(column + ((<usize>i) << 3), load<f64>(pointer(job, Word.background) + ((<usize>(i * nY + j)) << 3)));
    }
    for (let lane: i32 = 0; lane < laneCount<T>(); lane++) {
      const t: f64 = nx > 1 ? (2.0 * <f64>(x + lane)) / <f64>(nx - 1) - 1.0 : 0.0;
      store<T>(series + ((<usize>j) << 4) + <usize>lane * sizeof<T>(), <T>legendreValue(column, nX, t));
    }
  }
}

function backgroundOn<T extends number>(job: usize, y: i32): v128 {
  const nY = count(job, Word.nBackgroundY);
  const series = pointer(job, Word.backgroundSeries);
  const polynomials = pointer(job, Word.rowPolynomials) + <usize>(y * nY) * sizeof<T>();
  let sum = v128.load(series);
  for (let j: i32 = 1; j < nY; j++) {
    const p = loadSpread<T>(polynomials + <usize>j * sizeof<T>());
    sum = v128.add<T>(sum, v128.mul<T>(v128.load(series + ((<usize>j) << 4)), p));
  }
  return sum;
}

/** Spectra of the `nValid` columns from `x` on into the images. */
export function storeGroup<T extends number>(job: usize, x: i32, nValid: i32): void {
  const nx = <usize>count(job, Word.nx);
  const nFibre = count(job, Word.nFibre);
  const flags = pointer(job, Word.flagsOfLanes);
  for (let k: i32 = 0; k < nFibre; k++) {
    const row = <usize>load<i32>(pointer(job, Word.outputRow) + ((<usize>k) << 2));
    const chi2 = reducedChiSquare<T>(job, k);
    v128.store(pointer(job, Word.weighted), chi2);
    for (let lane: i32 = 0; lane < nValid; lane++) {
      const pixel = row * nx + <usize>(x + lane);
      const own = load<i32>(flags + ((<usize>(k * laneCount<T>() + lane)) << 2));
      const valid = isValid(own);
      storeNumber<T>(job, Word.flux, pixel, Word.fluxes, k, lane, valid);
      storeNumber<T>(job, Word.variance, pixel, Word.variances, k, lane, valid);
      storeNumber<T>(job, Word.chi2, pixel, Word.weighted, 0, lane, valid);
      storeNumber<T>(
        job,
        Word.neighbourCovariance,
        pixel,
        Word.covariancesBelow,
        k + 1,
        lane,
        valid && pairs<T>(job, k, lane),
      );
      storeNumber<T>(job, Word.backgroundUnder, pixel, Word.backgroundRows, middleRow(job, k), lane, true);
      store<i32>(pointer(job, Word.flags) + (pixel << 2), own);
    }
  }
}

/** Light of all fibres in the group's pixels into Word.modelImage, when that is there. */
export function storeModel<T extends number>(job: usize, x: i32, nValid: i32): void {
  const image = pointer(job, Word.modelImage);
  if (image == 0) return;
  const nx = <usize>count(job, Word.nx);
  for (let y: i32 = 0; y < count(job, Word.ny); y++) {
    const from = pointer(job, Word.model) + ((<usize>(windowRows(job) + y)) << 4);
    const to = image + ((<usize>y * nx + <usize>x) << 2);
    for (let lane: i32 = 0; lane < nValid; lane++) {
      store<f32>(to + ((<usize>lane) << 2), <f32>laneAt<T>(from, lane));
    }
  }
}

/** What this group rejected, and its suspects, into Word.rejected. */
export function storeRejected<T extends number>(job: usize, x: i32, nValid: i32): void {
  const nx = <usize>count(job, Word.nx);
  const cosmic: u32 = 0x01010101 * MaskBit.cosmic;
  for (let y: i32 = 0; y < count(job, Word.ny); y++) {
    const row = windowRows(job) + y;
    const bits = (load<u32>(pointer(job, Word.bits) + ((<usize>row) << 2)) & cosmic) | suspects<T>(job, row);
    if (bits == 0) continue;
    const at = pointer(job, Word.rejected) + <usize>y * nx + <usize>x;
    for (let lane: i32 = 0; lane < nValid; lane++) {
      store<u8>(at + <usize>lane, load<u8>(at + <usize>lane) | <u8>(bits >> (lane << 3)));
    }
  }
}

function storeNumber<T extends number>(
  job: usize,
  image: Word,
  pixel: usize,
  from: Word,
  k: i32,
  lane: i32,
  valid: bool,
): void {
  const value = valid ? laneAt<T>(pointer(job, from) + ((<usize>k) << 4), lane) : <T>NaN;
  store<T>(pointer(job, image) + pixel * sizeof<T>(), value);
}

function isValid(flags: i32): bool {
  return (flags & (Flag.weightLost | Flag.outside)) == 0;
}

/** Whether the next slit position is the next fibre and has a value here. */
function pairs<T extends number>(job: usize, k: i32, lane: i32): bool {
  if (k + 1 >= count(job, Word.nFibre)) return false;
  const rows = pointer(job, Word.outputRow) + ((<usize>k) << 2);
  if (load<i32>(rows, 4) != load<i32>(rows) + 1) return false;
  return isValid(load<i32>(pointer(job, Word.flagsOfLanes) + ((<usize>((k + 1) * laneCount<T>() + lane)) << 2)));
}

/** The row of the frame nearest to the middle of the fibre's window, as a lane row. */
function middleRow(job: usize, k: i32): i32 {
  const margin = windowRows(job);
  const row = margin + windowStartOf(job, k) + count(job, Word.halfWindow);
  return min(max(row, margin), laneRows(job) - margin - 1);
}

/** χ² of the fit over the fibre's window, over its pixels less the parameters that they carry; NaN with too few. */
function reducedChiSquare<T extends number>(job: usize, k: i32): v128 {
  const first = windowOffset(job, k);
  const zero = spread<T>(0);
  let sum = zero;
  let freedom = zero;
  for (let i: i32 = 0; i < windowRows(job); i++) {
    const at = first + ((<usize>i) << 4);
    const excess = v128.sub<T>(v128.load(pointer(job, Word.light) + at), v128.load(pointer(job, Word.model) + at));
    const inverse = v128.load(pointer(job, Word.inverseVariance) + at);
    sum = v128.add<T>(sum, v128.mul<T>(v128.mul<T>(excess, excess), inverse));
    const free = v128.sub<T>(spread<T>(1), weightsOnRow<T>(job, k, windowStartOf(job, k) + i));
    freedom = v128.add<T>(freedom, v128.and(free, v128.gt<T>(inverse, zero)));
  }
  const enough = v128.gt<T>(freedom, spread<T>(0.5));
  return v128.bitselect(v128.div<T>(sum, freedom), spread<T>(NaN), enough);
}

function weightsOnRow<T extends number>(job: usize, k: i32, row: i32): v128 {
  const bandwidth = count(job, Word.bandwidth);
  let sum = spread<T>(0);
  for (let m = max(k - bandwidth, 0); m <= min(k + bandwidth, count(job, Word.nFibre) - 1); m++) {
    const i = row - windowStartOf(job, m);
    if (i >= 0 && i < windowRows(job)) sum = v128.add<T>(sum, v128.load(windowWeights(job, m) + ((<usize>i) << 4)));
  }
  return sum;
}
