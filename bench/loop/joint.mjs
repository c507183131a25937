// The honest rival: joint extraction as a loop over typed arrays, written for speed by someone who knows the engine.
//
// The work is the kernel's: windows and weights at six nodes a block and a polynomial between them, computed once and used in
// all solves; normal equations of half-bandwidth 2; first fit on the data's noise, then rounds of rejection with the
// profile's misfit and variance from the model; background surface; variances and neighbours' covariances from the
// inverse's band; flags, reduced χ², suspects. Doubles within, Float32 images out. Left out: images
// of the pixels' response, which the frames here have none of, and bandwidths other than 2.
//
// What makes it fast: no allocation in a column; a block of columns is copied to columns that lie contiguous, and its
// spectra leave it row by row; sums over windows from running sums; what needs a reason (lost pixels, excess) is worked
// out only where there is one.
import { Flag, MaskBit } from "../../dist/reference/bits.js";
import { Column } from "./column.mjs";
import { Profiles } from "./profiles.mjs";

const largestLoss = 0.5;
const noticedShare = 0.01;
const unsettledSigma = 0.1;

export class JointLoop {
  /** @param {import("../../dist/reference/extract.js").ExtractionInput} input */
  constructor(input) {
    const { nx, ny, nFibre, noise } = input;
    const fits = input.bandwidth === 2 && input.method === "joint" && input.shape === undefined;
    if (!fits || noise.fixedVarianceImage || noise.inverseResponse || noise.responseRelativeVariance) {
      throw new RangeError("The loop is for joint extraction with Gaussians, bandwidth 2 and no images of response.");
    }
    this.input = input;
    this.rejected = input.rejected.slice();
    const image = () => new Float32Array(nFibre * nx);
    this.output = {
      flux: image(),
      variance: image(),
      neighbourCovariance: image(),
      flags: new Int32Array(nFibre * nx),
      chi2: image(),
      background: image(),
    };
    this.profiles = new Profiles(input);
    this.column = new Column(input, this.profiles);
    const { blockColumns } = input;
    const tile = (/** @type {number} */ n) => new Float32Array(n * blockColumns);
    this.tile = {
      electrons: tile(ny),
      fixed: tile(ny),
      bits: new Uint8Array(ny * blockColumns),
      suspect: new Uint8Array(ny * blockColumns),
      flux: tile(nFibre),
      variance: tile(nFibre),
      neighbourCovariance: tile(nFibre),
      chi2: tile(nFibre),
      background: tile(nFibre),
      flags: new Int32Array(nFibre * blockColumns),
    };
    this.series = new Float64Array(input.background.nY);
    this.rowPolynomials = rowPolynomials(ny, input.background.nY);
    this.columnPolynomials = rowPolynomials(nx, input.background.nX);
    this.chiBefore = new Float64Array(this.column.nRow + 1);
    this.freeBefore = new Float64Array(this.column.nRow + 1);
  }

  run(x0 = 0, x1 = this.input.nx) {
    const { blockColumns } = this.input;
    for (let start = x0; start < x1; start += blockColumns) {
      const n = Math.min(blockColumns, x1 - start);
      this.profiles.openBlock(start);
      this.column.openBlock();
      this.copyIn(start, n);
      for (let offset = 0; offset < n; offset++) this.extract(start, offset);
      this.copyOut(start, n);
    }
  }

  /** @param {number} x0 @param {number} offset */
  extract(x0, offset) {
    this.profiles.openColumn(offset);
    this.load(x0 + offset, offset);
    this.column.settle();
    this.keepRejections(offset);
    this.column.invert();
    this.sumChi();
    this.keepSpectra(x0 + offset, offset);
  }

  /** Rows of the frame's block, turned: column by column. @param {number} x0 @param {number} n */
  copyIn(x0, n) {
    const { nx, ny, electrons, mask, noise, blockColumns } = this.input;
    const { tile, rejected } = this;
    for (let y = 0; y < ny; y++) {
      const at = y * nx + x0;
      const band = noise.bandOfRow[y] * nx + x0;
      for (let i = 0; i < n; i++) {
        const value = electrons[at + i];
        tile.electrons[i * ny + y] = value;
        tile.fixed[i * ny + y] = noise.fixedVariance[band + i];
        const masked = mask[at + i] === 0 && !Number.isFinite(value) ? MaskBit.missing : mask[at + i];
        tile.bits[i * ny + y] = masked | (rejected[at + i] & (MaskBit.cosmic | MaskBit.grown));
      }
    }
    tile.suspect.fill(0, 0, blockColumns * ny);
  }

  /** One column of the tile into the rows: background taken off. @param {number} x @param {number} offset */
  load(x, offset) {
    const { column, series, rowPolynomials, tile } = this;
    const { ny, background } = this.input;
    const { nX, nY, coefficients } = background;
    for (let j = 0; j < nY; j++) {
      let sum = 0;
      for (let i = 0; i < nX; i++) sum += coefficients[i * nY + j] * this.columnPolynomials[x * nX + i];
      series[j] = sum;
    }
    const { bits, light, fixed, margin } = column;
    const from = offset * ny;
    for (let y = 0, p = 0; y < ny; y++, p += nY) {
      let here = series[0];
      for (let j = 1; j < nY; j++) here += series[j] * rowPolynomials[p + j];
      const row = margin + y;
      bits[row] = tile.bits[from + y];
      column.background[row] = here;
      light[row] = bits[row] === 0 ? tile.electrons[from + y] - here : 0;
      fixed[row] = tile.fixed[from + y];
    }
  }

  /** Rejections and suspects of the column. @param {number} offset */
  keepRejections(offset) {
    const { column, tile } = this;
    const { ny, growKappa, kappa } = this.input;
    const { bits, light, model, background, fixed, margin } = column;
    const limit = growKappa * growKappa;
    const from = offset * ny;
    for (let y = 0; y < ny; y++) {
      const row = margin + y;
      if (kappa === 0) continue;
      if (bits[row] !== 0) {
        tile.suspect[from + y] = bits[row] & MaskBit.cosmic;
        continue;
      }
      const excess = light[row] - model[row];
      if (!(excess > 0)) continue;
      const here = model[row] + background[row];
      if (excess * excess > limit * (fixed[row] + Math.max(here, 0)) && column.squaredExcess(row) > limit) {
        tile.suspect[from + y] = MaskBit.suspect;
      }
    }
  }

  /** Running sums over the rows: χ², and pixels less what the fibres on them take. */
  sumChi() {
    const { chiBefore, freeBefore, column } = this;
    const { light, model, inverseVariance, covered, nRow } = column;
    let chi = 0;
    let free = 0;
    for (let row = 0; row < nRow; row++) {
      chiBefore[row] = chi;
      freeBefore[row] = free;
      const inverse = inverseVariance[row];
      if (inverse > 0) {
        const excess = light[row] - model[row];
        chi += excess * excess * inverse;
        free += 1 - covered[row];
      }
    }
    chiBefore[nRow] = chi;
    freeBefore[nRow] = free;
  }

  /** @param {number} x @param {number} offset */
  keepSpectra(x, offset) {
    const { column, tile, profiles, chiBefore, freeBefore } = this;
    const { nFibre, blockColumns, seen, ny } = this.input;
    const { start, nWindow } = profiles;
    const { flux, variance, covariance, lastChange, lostBefore, margin } = column;
    for (let k = 0; k < nFibre; k++) {
      const first = margin + start[k];
      let own = x >= seen[2 * k] && x <= seen[2 * k + 1] ? 0 : Flag.extrapolated;
      if (lostBefore[first + nWindow] !== lostBefore[first]) own |= this.pixelFlags(k, first);
      const centre = start[k] + profiles.centre(k, offset);
      if (!(centre >= -0.5 && centre < ny - 0.5)) own |= Flag.outside;
      if (!(variance[k] > 0)) own |= Flag.weightLost;
      else if (lastChange[k] * lastChange[k] > unsettledSigma * unsettledSigma * variance[k]) {
        own |= Flag.varianceUnsettled;
      }
      tile.flags[k * blockColumns + offset] = own;
    }
    for (let k = 0; k < nFibre; k++) {
      const first = margin + start[k];
      const at = k * blockColumns + offset;
      const valid = isValid(tile.flags[at]);
      const free = freeBefore[first + nWindow] - freeBefore[first];
      tile.flux[at] = valid ? flux[k] : Number.NaN;
      tile.variance[at] = valid ? variance[k] : Number.NaN;
      tile.chi2[at] = valid && free > 0.5 ? (chiBefore[first + nWindow] - chiBefore[first]) / free : Number.NaN;
      const pair = valid && k + 1 < nFibre && isValid(tile.flags[at + blockColumns]);
      tile.neighbourCovariance[at] = pair ? covariance[k + 1] : Number.NaN;
      const middle = Math.min(Math.max(first + (nWindow >> 1), margin), column.nRow - margin - 1);
      tile.background[at] = column.background[middle];
      if (this.saturatedBeside(k, at)) tile.flags[at] |= Flag.neighbourSaturated;
    }
  }

  pixelFlags(k, first) {
    const { bits } = this.column;
    const { weights, nWindow } = this.profiles;
    let lost = 0;
    let bad = 0;
    let saturated = 0;
    let cosmic = 0;
    for (let i = 0; i < nWindow; i++) {
      const here = bits[first + i];
      if (here === 0) continue;
      const share = weights[k * nWindow + i];
      lost += share;
      if (here & (MaskBit.bad | MaskBit.missing)) bad += share;
      if (here & MaskBit.saturated) saturated += share;
      if (here & (MaskBit.cosmic | MaskBit.grown)) cosmic += share;
    }
    return (
      (cosmic > noticedShare ? Flag.cosmicRay : 0) |
      (bad > noticedShare ? Flag.badPixel : 0) |
      (saturated > noticedShare ? Flag.saturated : 0) |
      (lost > largestLoss ? Flag.weightLost : 0)
    );
  }

  saturatedBeside(k, at) {
    const { start, nWindow } = this.profiles;
    const { flags } = this.tile;
    const { blockColumns, nFibre } = this.input;
    return (
      (k > 0 && (flags[at - blockColumns] & Flag.saturated) !== 0 && start[k] - start[k - 1] < nWindow) ||
      (k + 1 < nFibre && (flags[at + blockColumns] & Flag.saturated) !== 0 && start[k + 1] - start[k] < nWindow)
    );
  }

  /** The block's spectra and marks into the images. @param {number} x0 @param {number} n */
  copyOut(x0, n) {
    const { tile, output, rejected } = this;
    const { nx, ny, nFibre, blockColumns } = this.input;
    for (const name of /** @type {const} */ ([
      "flux",
      "variance",
      "neighbourCovariance",
      "flags",
      "chi2",
      "background",
    ])) {
      copyRows(tile[name], output[name], nFibre, blockColumns, nx, x0, n);
    }
    for (let y = 0; y < ny; y++) {
      const at = y * nx + x0;
      for (let i = 0; i < n; i++) rejected[at + i] |= tile.suspect[i * ny + y];
    }
  }
}

function copyRows(from, to, nRow, stride, nx, x0, n) {
  for (let k = 0; k < nRow; k++) for (let i = 0; i < n; i++) to[k * nx + x0 + i] = from[k * stride + i];
}

function isValid(flags) {
  return (flags & (Flag.weightLost | Flag.outside)) === 0;
}

/** P_0 … P_{n−1} on every pixel of an axis: [length × n]. */
function rowPolynomials(length, n) {
  const out = new Float64Array(length * n);
  for (let i = 0; i < length; i++) {
    const t = length > 1 ? (2 * i) / (length - 1) - 1 : 0;
    let [below, here] = [1, t];
    out[i * n] = 1;
    for (let j = 1; j < n; j++) {
      out[i * n + j] = here;
      const above = ((2 * j + 1) * t * here - j * below) / (j + 1);
      below = here;
      here = above;
    }
  }
  return out;
}
