/** Columns in and out: a group of neighbouring columns from the frame into lane rows, its spectra back into the images. */
import { Flag, MaskBit } from "../src/reference/bits";
import { count, laneRows, marginRows, pointer, Word, windowOffset, windowRows, windowStartOf } from "./job";
import { anyBitsInWindow, laneAt, laneCount, lanesWithout, loadBits, loadPixels, loadSpread, spread } from "./lanes";
import { legendreValue } from "./legendre";
import { knowsResponse } from "./variance";

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

/** Lane rows beyond the frame: never good, the same for every group. Once a job. */
export function prepareMargins<T extends number>(job: usize): void {
  const margin = marginRows(job);
  for (let row: i32 = 0; row < margin; row++) {
    clearRow<T>(job, row);
    clearRow<T>(job, margin + count(job, Word.ny) + row);
  }
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

/** Columns that are copied together out of the frame, and spectra into it: in the frame they lie rows apart, a page of memory
 * each, and a cache line holds sixteen. */
export const tileColumns: i32 = 16;

/** Pixels of the sixteen columns from `x` on into Word.tileElectrons and Word.tileBits, a row after the other. */
export function loadTile(job: usize, x: i32): void {
  const nx = <usize>count(job, Word.nx);
  const ny = <usize>count(job, Word.ny);
  const kept = i8x16.splat(<i8>(MaskBit.cosmic | MaskBit.grown));
  const mask = pointer(job, Word.mask);
  const rejected = pointer(job, Word.rejected);
  const electrons = pointer(job, Word.electrons);
  let pixel = <usize>x;
  let to = pointer(job, Word.tileElectrons);
  let bits = pointer(job, Word.tileBits);
  // The last row may end before the tile does: what a full tile would read beyond the images is left out.
  const whole = nx * ny >= 16 + <usize>x ? (nx * ny - 16 - <usize>x) / nx + 1 : 0;
  for (let y: usize = 0; y < whole; y++) {
    const from = electrons + (pixel << 2);
    v128.store(to, v128.load(from));
    v128.store(to, v128.load(from, 16), 16);
    v128.store(to, v128.load(from, 32), 32);
    v128.store(to, v128.load(from, 48), 48);
    v128.store(bits, v128.or(v128.load(mask + pixel), v128.and(v128.load(rejected + pixel), kept)));
    pixel += nx;
    to += 64;
    bits += 16;
  }
  for (let y = whole; y < ny; y++) {
    for (let i: usize = 0; i < 16 && pixel + i < nx * ny; i++) {
      store<f32>(to + (i << 2), load<f32>(electrons + ((pixel + i) << 2)));
      store<u8>(
        bits + i,
        load<u8>(mask + pixel + i) | (load<u8>(rejected + pixel + i) & <u8>(MaskBit.cosmic | MaskBit.grown)),
      );
    }
    pixel += nx;
    to += 64;
    bits += 16;
  }
}

/** Lane rows row0 … row1 − 1 of the `nValid` columns from `x` on: bits, light without background, and what makes the
 * variance. `tile`: first column of the tile that holds them, or −1 when the frame itself is to be read. */
export function loadGroup<T extends number>(job: usize, x: i32, nValid: i32, row0: i32, row1: i32, tile: i32): void {
  const margin = marginRows(job);
  const nx = <usize>count(job, Word.nx);
  const responds = knowsResponse(job);
  const from = max(row0, margin);
  const to = min(row1, margin + count(job, Word.ny));
  const nY = count(job, Word.nBackgroundY);
  const kept: u32 = 0x01010101 * (MaskBit.cosmic | MaskBit.grown);
  const tiled = tile >= 0;
  const electrons = pointer(job, tiled ? Word.tileElectrons : Word.electrons);
  const mask = pointer(job, tiled ? Word.tileBits : Word.mask);
  const rejected = pointer(job, Word.rejected);
  const stride = tiled ? <usize>tileColumns : nx;
  const bitRows = pointer(job, Word.bits);
  const lightRows = pointer(job, Word.light);
  const fixedRows = pointer(job, Word.fixed);
  const backgroundRows = pointer(job, Word.backgroundRows);
  const series = pointer(job, Word.backgroundSeries);
  prepareBackgroundSeries<T>(job, x);
  const each = pointer(job, Word.fixedRows) != 0;
  if (!each) v128.store(fixedRows, fixedVariance<T>(job, x, 0, <usize>x, nValid));
  let polynomials = pointer(job, Word.rowPolynomials) + <usize>(nY * (from - margin)) * sizeof<T>();
  let at = <usize>(from - margin) * stride + <usize>(tiled ? x - tile : x);
  let pixel = <usize>(from - margin) * nx + <usize>x;
  for (let row = from; row < to; row++) {
    const laneRow = (<usize>row) << 4;
    let bits = loadBits<T>(mask + at, nValid, MaskBit.missing);
    if (!tiled) bits |= loadBits<T>(rejected + at, nValid, 0) & kept;
    store<u32>(bitRows + (laneRow >> 2), bits);
    let background = v128.load(series);
    for (let j: i32 = 1; j < nY; j++) {
      const p = loadSpread<T>(polynomials + <usize>j * sizeof<T>());
      background = v128.add<T>(background, v128.mul<T>(v128.load(series + ((<usize>j) << 4)), p));
    }
    polynomials += <usize>nY * sizeof<T>();
    v128.store(backgroundRows + laneRow, background);
    const light = v128.sub<T>(loadPixels<T>(electrons + (at << 2), nValid), background);
    v128.store(lightRows + laneRow, bits ? v128.and(light, lanesWithout<T>(bits)) : light);
    if (each) v128.store(fixedRows + laneRow, fixedVariance<T>(job, x, row - margin, pixel, nValid));
    if (responds) loadResponse<T>(job, laneRow, pixel, nValid);
    at += stride;
    pixel += nx;
  }
}

function loadResponse<T extends number>(job: usize, laneRow: usize, pixel: usize, nValid: i32): void {
  const inverse = imageOr<T>(pointer(job, Word.inverseResponse), pixel, nValid, 1);
  const variance = imageOr<T>(pointer(job, Word.responseRelativeVariance), pixel, nValid, 0);
  v128.store(pointer(job, Word.inverseResponseRows) + laneRow, inverse);
  v128.store(pointer(job, Word.responseVarianceRows) + laneRow, variance);
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

/** The images that an extraction writes, in the order in which a tile holds them; flags apart, which are i32. */
function spectrumImage(which: i32): Word {
  if (which == 0) return Word.flux;
  if (which == 1) return Word.variance;
  if (which == 2) return Word.neighbourCovariance;
  if (which == 3) return Word.chi2;
  return which == 4 ? Word.backgroundUnder : Word.fitFlux;
}

const nSpectrumImage: i32 = 6;

/** Where fibre k's number of column `x` goes: in the tile that begins with column `tile`, or in the image itself for −1. */
function spectrumAt<T extends number>(job: usize, which: i32, k: i32, x: i32, tile: i32): usize {
  if (tile >= 0) {
    const row = <usize>(which * count(job, Word.nFibre) + k);
    return pointer(job, Word.tileSpectra) + (row * <usize>tileColumns + <usize>(x - tile)) * sizeof<T>();
  }
  return pointer(job, spectrumImage(which)) + imageOffset(job, k, x) * sizeof<T>();
}

function flagsAt(job: usize, k: i32, x: i32, tile: i32): usize {
  if (tile >= 0) return pointer(job, Word.tileFlags) + ((<usize>(k * tileColumns + x - tile)) << 2);
  return pointer(job, Word.flags) + (imageOffset(job, k, x) << 2);
}

/** Numbers before fibre k's column `x` in an image. */
function imageOffset(job: usize, k: i32, x: i32): usize {
  const row = <usize>load<i32>(pointer(job, Word.outputRow) + ((<usize>k) << 2));
  return row * <usize>count(job, Word.nx) + <usize>x;
}

/** Spectra of fibres k0 … k1 − 1 in those of the `nValid` columns from `x` on that `mask` holds. `raised`: whether any flag
 * is; `tile`: first column of the tile that takes them, or −1. */
export function storeGroup<T extends number>(
  job: usize,
  x: i32,
  nValid: i32,
  k0: i32,
  k1: i32,
  mask: i32,
  raised: bool,
  tile: i32,
): void {
  const whole = !raised && tile >= 0 && nValid == laneCount<T>() && mask == (1 << laneCount<T>()) - 1;
  const weighted = pointer(job, Word.weighted);
  const fluxes = pointer(job, Word.fluxes);
  const variances = pointer(job, Word.variances);
  const covariances = pointer(job, Word.covariancesBelow);
  const rowBytes: usize = <usize>tileColumns * sizeof<T>();
  const imageBytes = <usize>count(job, Word.nFibre) * rowBytes;
  let to = spectrumAt<T>(job, 0, k0, x, max(tile, 0)); // of the fibre, when the group goes to a tile as a whole
  let flags = flagsAt(job, k0, x, max(tile, 0));
  for (let k = k0; k < k1; k++) {
    const chi2 = reducedChiSquare<T>(job, k);
    const background = v128.load(pointer(job, Word.backgroundRows) + ((<usize>middleRow(job, k)) << 4));
    const at = (<usize>k) << 4;
    if (whole) {
      const covariance = isNextRow(job, k) ? v128.load(covariances + at, 16) : spread<T>(NaN);
      v128.store(to, v128.load(fluxes + at));
      v128.store(to + imageBytes, v128.load(variances + at));
      v128.store(to + 2 * imageBytes, covariance);
      v128.store(to + 3 * imageBytes, chi2);
      v128.store(to + 4 * imageBytes, background);
      if (sizeof<T>() == 4) v128.store(flags, spread<T>(0));
      else store<i64>(flags, 0);
      to += rowBytes;
      flags += (<usize>tileColumns) << 2;
      continue;
    }
    v128.store(weighted, chi2);
    v128.store(weighted, background, 16);
    for (let lane: i32 = 0; lane < nValid; lane++) {
      if (((mask >> lane) & 1) == 0) continue;
      const own = flagsOf<T>(job, k, lane);
      const valid = isValid(own);
      const paired = valid && isNextRow(job, k) && isValid(flagsOf<T>(job, k + 1, lane));
      const column = x + lane;
      storeNumber<T>(spectrumAt<T>(job, 0, k, column, tile), pointer(job, Word.fluxes) + at, lane, valid);
      storeNumber<T>(spectrumAt<T>(job, 1, k, column, tile), pointer(job, Word.variances) + at, lane, valid);
      storeNumber<T>(
        spectrumAt<T>(job, 2, k, column, tile),
        pointer(job, Word.covariancesBelow) + at + 16,
        lane,
        paired,
      );
      storeNumber<T>(spectrumAt<T>(job, 3, k, column, tile), weighted, lane, valid);
      storeNumber<T>(spectrumAt<T>(job, 4, k, column, tile), weighted + 16, lane, true);
      store<i32>(flagsAt(job, k, column, tile), own);
    }
  }
}

/** The fit's own fluxes, whatever the method makes of them, for a later look at these columns. */
export function storeFit<T extends number>(
  job: usize,
  x: i32,
  nValid: i32,
  k0: i32,
  k1: i32,
  mask: i32,
  tile: i32,
): void {
  const fluxes = pointer(job, Word.fluxes);
  if (tile >= 0) {
    let to = spectrumAt<T>(job, 5, k0, x, tile);
    for (let k = k0; k < k1; k++) {
      v128.store(to, v128.load(fluxes + ((<usize>k) << 4)));
      to += <usize>tileColumns * sizeof<T>();
    }
    return;
  }
  for (let k = k0; k < k1; k++) {
    const to = spectrumAt<T>(job, 5, k, x, tile);
    for (let lane: i32 = 0; lane < nValid; lane++) {
      if ((mask >> lane) & 1) store<T>(to + <usize>lane * sizeof<T>(), laneAt<T>(fluxes + ((<usize>k) << 4), lane));
    }
  }
}

/** Fluxes of fibres k0 … k1 − 1 as `storeFit` left them in the image. */
export function loadFit<T extends number>(job: usize, x: i32, nValid: i32, k0: i32, k1: i32): void {
  const fluxes = pointer(job, Word.fluxes);
  for (let k = k0; k < k1; k++) {
    const from = spectrumAt<T>(job, 5, k, x, -1);
    const at = fluxes + ((<usize>k) << 4);
    v128.store(at, spread<T>(0));
    for (let lane: i32 = 0; lane < nValid; lane++) {
      store<T>(at + <usize>lane * sizeof<T>(), load<T>(from + <usize>lane * sizeof<T>()));
    }
  }
}

/** The tile's first `width` columns into the images. */
export function storeTile<T extends number>(job: usize, tile: i32, width: i32): void {
  const nFibre = count(job, Word.nFibre);
  const bytes = <usize>width * sizeof<T>();
  let from = pointer(job, Word.tileSpectra);
  for (let which: i32 = 0; which < nSpectrumImage; which++) {
    const image = pointer(job, spectrumImage(which));
    for (let k: i32 = 0; k < nFibre; k++) {
      copyBytes(image + imageOffset(job, k, tile) * sizeof<T>(), from, bytes);
      from += <usize>tileColumns * sizeof<T>();
    }
  }
  for (let k: i32 = 0; k < nFibre; k++) {
    copyBytes(flagsAt(job, k, tile, -1), flagsAt(job, k, tile, tile), (<usize>width) << 2);
  }
}

/** A few bytes, a multiple of four: too few for memory.copy to be worth its call. */
function copyBytes(to: usize, from: usize, n: usize): void {
  let at: usize = 0;
  for (; at + 16 <= n; at += 16) v128.store(to + at, v128.load(from + at));
  for (; at < n; at += 4) store<u32>(to + at, load<u32>(from + at));
}

/** Light of all fibres in the group's pixels into Word.modelImage, when that is there. */
export function storeModel<T extends number>(job: usize, x: i32, nValid: i32): void {
  const image = pointer(job, Word.modelImage);
  if (image == 0) return;
  const nx = <usize>count(job, Word.nx);
  const margin = marginRows(job);
  const scratch = pointer(job, Word.weighted);
  for (let y: i32 = 0; y < count(job, Word.ny); y++) {
    const at = (<usize>(margin + y)) << 4;
    const light = v128.add<T>(v128.load(pointer(job, Word.model) + at), v128.load(pointer(job, Word.wingLight) + at));
    v128.store(scratch, light);
    const to = image + ((<usize>y * nx + <usize>x) << 2);
    for (let lane: i32 = 0; lane < nValid; lane++) {
      store<f32>(to + ((<usize>lane) << 2), <f32>laneAt<T>(scratch, lane));
    }
  }
}

/** What this group rejected, and its suspects, into Word.rejected. */
export function storeRejected(job: usize, x: i32, nValid: i32): void {
  const nx = <usize>count(job, Word.nx);
  const margin = marginRows(job);
  const cosmic: u32 = 0x01010101 * MaskBit.cosmic;
  const bitRows = pointer(job, Word.bits);
  const suspectRows = pointer(job, Word.suspects);
  for (let row = margin; row < margin + count(job, Word.ny); row++) {
    const from = (<usize>row) << 2;
    const bits = (load<u32>(bitRows + from) & cosmic) | load<u32>(suspectRows + from);
    if (bits == 0) continue;
    const at = pointer(job, Word.rejected) + <usize>(row - margin) * nx + <usize>x;
    for (let lane: i32 = 0; lane < nValid; lane++) {
      store<u8>(at + <usize>lane, load<u8>(at + <usize>lane) | <u8>(bits >> (lane << 3)));
    }
  }
}

function storeNumber<T extends number>(to: usize, from: usize, lane: i32, valid: bool): void {
  store<T>(to, valid ? laneAt<T>(from, lane) : <T>NaN);
}

function flagsOf<T extends number>(job: usize, k: i32, lane: i32): i32 {
  return load<i32>(pointer(job, Word.flagsOfLanes) + ((<usize>(k * laneCount<T>() + lane)) << 2));
}

function isValid(flags: i32): bool {
  return (flags & (Flag.weightLost | Flag.outside)) == 0;
}

/** Whether the fibre after this one stands on the next slit position. */
function isNextRow(job: usize, k: i32): bool {
  if (k + 1 >= count(job, Word.nFibre)) return false;
  const rows = pointer(job, Word.outputRow) + ((<usize>k) << 2);
  return load<i32>(rows, 4) == load<i32>(rows) + 1;
}

/** The row of the frame nearest to the middle of the fibre's window, as a lane row. */
function middleRow(job: usize, k: i32): i32 {
  const margin = marginRows(job);
  const row = margin + windowStartOf(job, k) + count(job, Word.halfWindow);
  return min(max(row, margin), laneRows(job) - margin - 1);
}

/** χ² of the fit over the fibre's window, over its pixels less the parameters that they carry: each fibre counts by the
 * share of its profile that falls on them. NaN with too few. */
function reducedChiSquare<T extends number>(job: usize, k: i32): v128 {
  const first = windowOffset(job, k);
  const zero = spread<T>(0);
  const one = spread<T>(1);
  const squares = pointer(job, Word.chiSquare) + first;
  const crowd = pointer(job, Word.crowd) + first;
  const ivar = pointer(job, Word.inverseVariance) + first;
  const bytes = (<usize>windowRows(job)) << 4;
  let sum = zero;
  let freedom = zero;
  if (anyBitsInWindow(pointer(job, Word.bits) + (first >> 2), windowRows(job))) {
    for (let at: usize = 0; at < bytes; at += 16) {
      sum = v128.add<T>(sum, v128.load(squares + at));
      const good = v128.gt<T>(v128.load(ivar + at), zero);
      freedom = v128.add<T>(freedom, v128.and(v128.sub<T>(one, v128.load(crowd + at)), good));
    }
  } else {
    for (let at: usize = 0; at < bytes; at += 16) {
      sum = v128.add<T>(sum, v128.load(squares + at));
      freedom = v128.add<T>(freedom, v128.sub<T>(one, v128.load(crowd + at)));
    }
  }
  const enough = v128.gt<T>(freedom, spread<T>(0.5));
  return v128.bitselect(v128.div<T>(sum, freedom), spread<T>(NaN), enough);
}
