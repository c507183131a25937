/** Columns in: pixels of the frame into lane rows, a group of neighbouring columns at a time; src/reference/columns.ts is the
 * same for one column. */
import { MaskBit } from "../src/reference/bits";
import { count, marginRows, pointer, Word } from "./job";
import { laneCount, lanesWithout, loadBits, loadPixels, loadSpread, spread } from "./lanes";
import { legendreValue } from "./legendre";
import { knowsResponse, pixelVariance } from "./variance";

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
  for (let i: i32 = 0; i < 2 * margin; i++) clearRow<T>(job, i < margin ? i : i + count(job, Word.ny));
}

function clearRow<T extends number>(job: usize, row: i32): void {
  const at = (<usize>row) << 4;
  store<u32>(pointer(job, Word.bits) + ((<usize>row) << 2), outside);
  v128.store(pointer(job, Word.light) + at, spread<T>(0));
  v128.store(pointer(job, Word.backgroundRows) + at, spread<T>(0));
  v128.store(pointer(job, Word.fixed) + at, spread<T>(1));
  v128.store(pointer(job, Word.inverseResponseRows) + at, spread<T>(0));
  v128.store(pointer(job, Word.responseVarianceRows) + at, spread<T>(0));
  v128.store(pointer(job, Word.inverseVariance) + at, spread<T>(0));
  v128.store(pointer(job, Word.net) + at, spread<T>(0));
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

/** Lane rows row0 … row1 − 1 of the `nValid` columns from `x` on: bits, light without background, what makes the variance, and
 * for a first fit inverse variances from the data's own light, 0 where a pixel is not good. `tile`: first column of the tile that holds them, or −1 when the frame itself is to be read. */
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
  const bandOfRow = pointer(job, Word.bandOfRow);
  const image = pointer(job, Word.fixedVarianceImage) != 0;
  const ivarRows = pointer(job, Word.inverseVariance);
  const netRows = pointer(job, Word.net);
  const one = spread<T>(1);
  prepareBackgroundSeries<T>(job, x);
  const each = pointer(job, Word.fixedRows);
  let band: i32 = -1;
  let fixed = one;
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
    let light = v128.sub<T>(loadPixels<T>(electrons + (at << 2), nValid), background);
    if (bits) light = v128.and(light, lanesWithout<T>(bits));
    v128.store(lightRows + laneRow, light);
    v128.store(netRows + laneRow, light);
    const own = <i32>load<u8>(bandOfRow + <usize>(row - margin));
    if (image || own != band) fixed = fixedVariance<T>(job, x, own, pixel, nValid);
    band = own;
    v128.store(fixedRows + (laneRow & each), fixed);
    if (responds) loadResponse<T>(job, laneRow, pixel, nValid);
    const all = v128.add<T>(light, background);
    const inverse = v128.div<T>(one, pixelVariance<T>(job, fixed, laneRow, all, responds));
    v128.store(ivarRows + laneRow, bits ? v128.and(inverse, lanesWithout<T>(bits)) : inverse);
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
function fixedVariance<T extends number>(job: usize, x: i32, band: i32, pixel: usize, nValid: i32): v128 {
  const image = pointer(job, Word.fixedVarianceImage);
  const table = pointer(job, Word.fixedVariance) + ((<usize>band * <usize>count(job, Word.nx) + <usize>x) << 2);
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
