/** Spectra out: what a group of columns has come to, from lanes into the images; src/reference/spectra.ts is the same for one
 * column. */
import { Flag, MaskBit } from "../src/reference/bits";
import { tileColumns } from "./columns";
import { count, laneRows, marginRows, pointer, Word, windowOffset, windowRows, windowStartOf } from "./job";
import { anyBitsInWindow, laneAt, laneCount, spread } from "./lanes";

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
      for (let which: i32 = 0; which < 5; which++) {
        let from = which == 3 ? weighted : weighted + 16;
        if (which == 0) from = fluxes + at;
        else if (which == 1) from = variances + at;
        else if (which == 2) from = covariances + at + 16;
        const known = which == 4 || (which == 2 ? paired : valid);
        store<T>(spectrumAt<T>(job, which, k, column, tile), known ? laneAt<T>(from, lane) : <T>NaN);
      }
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
