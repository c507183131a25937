/** Spectra of all fibres on one wavelength grid, counts conserved, with the covariance between neighbouring bins that this
 * makes. To be done last and only when a common grid is needed: on their own pixels spectra have independent errors. */
import { Flag, type Spectra, UNUSABLE } from "../extraction/spectra.js";
import { median } from "../reference/median.js";
import { gridEdges, gridWavelength, type SpectralGrid } from "./grid.js";
import type { Medium } from "./medium.js";
import { type Overlaps, overlaps, type Reconstruction, rebinCovariance, rebinRow } from "./overlaps.js";
import { pixelEdges, pixelPositions } from "./pixelEdges.js";
import type { PixelWavelengths, SpectraProduct } from "./spectraProduct.js";

export interface RebinOptions {
  /** How light is spread within a pixel. Default constant. */
  reconstruction?: Reconstruction;
  /** Share of a bin's width without usable pixels up to which the rest makes good for it; beyond, the bin has no value.
   * Default 0.1. */
  mostLost?: number;
}

/** nFibre × grid.n, each fibre in its own row still. */
export interface RebinnedSpectra {
  spectra: Spectra;
  grid: SpectralGrid;
  /** cov(bin i, bin i + 1), e⁻²; NaN in the last bin. */
  binCovariance: Float64Array;
  /** What covariances with bins beyond the next one would add to the variance of a sum over many bins: median share. */
  neglected: number;
  sky?: Float64Array;
}

const furthest = 12;

/** @param wavelengths in the grid's medium. Fibres without any keep their rows, without values.
 * @throws CalibrationError for wavelengths that turn round. */
export function rebinSpectra(
  { spectra, sky, columnCovariance }: Pick<SpectraProduct, "spectra" | "sky" | "columnCovariance">,
  wavelengths: PixelWavelengths,
  grid: SpectralGrid,
  { reconstruction = "constant", mostLost = 0.1 }: RebinOptions = {},
): RebinnedSpectra {
  const { nFibre, nx } = spectra;
  const out = emptySpectra(spectra, grid.n);
  const binCovariance = new Float64Array(nFibre * grid.n).fill(Number.NaN);
  const rebinnedSky = sky && new Float64Array(nFibre * grid.n).fill(Number.NaN);
  const edges = gridEdges(grid);
  const shares: number[] = [];
  let above: Overlaps | undefined;
  for (let k = 0; k < nFibre; k++) {
    const flags = spectra.flags.subarray(k * nx, (k + 1) * nx);
    const own = pixelEdges(wavelengths.image.subarray(k * nx, (k + 1) * nx), k + 1);
    const rowOf = (image: Float32Array | Float64Array) => image.subarray(k * nx, (k + 1) * nx);
    const put = (image: Float32Array | Float64Array, row: Float64Array, at = k) => image.set(row, at * grid.n);
    if (own === undefined) {
      out.flags.set(withoutWavelength(flags, grid.n), k * grid.n);
      above = undefined;
      continue;
    }
    const positions = pixelPositions(own, edges);
    const usable = usablePixels(spectra, k);
    const rows = overlaps(positions, usable, reconstruction, mostLost);
    const [variance, covariance] = [rowOf(spectra.variance), columnCovariance && rowOf(columnCovariance)];
    put(out.flux, rebinRow(rows, rowOf(spectra.flux)));
    put(out.variance, rebinCovariance(rows, rows, 0, variance, covariance));
    put(binCovariance, rebinCovariance(rows, rows, 1, variance, covariance));
    put(out.background, rebinRow(rows, rowOf(spectra.background)));
    put(out.chi2, meanOfRow(rows, rowOf(spectra.chi2)));
    if (sky && rebinnedSky) put(rebinnedSky, rebinRow(rows, rowOf(sky)));
    out.flags.set(binFlags(rows, positions, usable, flags), k * grid.n);
    if (above !== undefined) {
      // Of the fibre before with this one: only the light of one column is shared.
      const shared = spectra.neighbourCovariance.subarray((k - 1) * nx, k * nx);
      put(out.neighbourCovariance, rebinCovariance(above, rows, 0, shared), k - 1);
    }
    shares.push(...beyondNext(rows, variance, covariance));
    above = rows;
  }
  return { spectra: out, grid, binCovariance, neglected: median(shares), ...(rebinnedSky ? { sky: rebinnedSky } : {}) };
}

/** Å of every bin, as many rows as fibres. */
export function binWavelengths(grid: SpectralGrid, nFibre: number): { medium: Medium; image: Float64Array } {
  const row = Float64Array.from({ length: grid.n }, (_, b) => gridWavelength(grid, b));
  const image = new Float64Array(nFibre * grid.n);
  for (let k = 0; k < nFibre; k++) image.set(row, k * grid.n);
  return { medium: grid.medium, image };
}

function emptySpectra({ nFibre, method, crosstalkCorrected }: Spectra, nx: number): Spectra {
  const none = () => new Float64Array(nFibre * nx).fill(Number.NaN);
  return {
    ...{ nFibre, nx, method, crosstalkCorrected },
    ...{ flux: none(), variance: none(), neighbourCovariance: none(), chi2: none(), background: none() },
    flags: new Int32Array(nFibre * nx),
  };
}

/** [nx]: 1 where the fibre's value is to be trusted. */
export function usablePixels({ nx, flux, variance, flags }: Spectra, k: number): Uint8Array {
  return Uint8Array.from({ length: nx }, (_, x) => {
    const at = k * nx + x;
    return (flags[at] & UNUSABLE) === 0 && Number.isFinite(flux[at]) && variance[at] >= 0 ? 1 : 0;
  });
}

/** A row without wavelengths: what all its pixels had in common, and that. */
function withoutWavelength(flags: Int32Array, n: number): Int32Array {
  const common = flags.reduce((a, b) => a & b, UNUSABLE);
  return new Int32Array(n).fill(common | Flag.noWavelength);
}

/** Mean over the bin's pixels, by their weights. */
function meanOfRow(rows: Overlaps, row: ArrayLike<number>): Float64Array {
  const ones = rebinRow(
    rows,
    Float64Array.from(row, (value) => (Number.isNaN(value) ? Number.NaN : 1)),
  );
  return rebinRow(rows, row).map((sum, b) => sum / ones[b]);
}

/** Bits of all pixels under a bin; of a bin that has no value those that took it. */
export function binFlags(rows: Overlaps, positions: Float64Array, usable: Uint8Array, flags: Int32Array): Int32Array {
  const nx = usable.length;
  return Int32Array.from({ length: rows.nBin }, (_, b) => {
    const low = Math.min(positions[b], positions[b + 1]);
    const high = Math.max(positions[b], positions[b + 1]);
    let [informative, taken] = [0, low < -0.5 || high > nx - 0.5 ? Flag.outside : 0];
    for (let j = Math.max(0, Math.floor(low + 0.5)); j < nx && j - 0.5 < high; j++) {
      if (usable[j]) informative |= flags[j];
      else taken |= flags[j] & UNUSABLE || Flag.weightLost;
    }
    if (rows.offset[b + 1] === rows.offset[b]) return taken;
    return informative | (rows.lost[b] > 0 ? Flag.badPixel : 0);
  });
}

/** Σ_d≥2 2·cov(b, b + d) over the variance, at some bins. */
function beyondNext(rows: Overlaps, variance: ArrayLike<number>, covariance: ArrayLike<number> | undefined): number[] {
  const own = rebinCovariance(rows, rows, 0, variance, covariance);
  const sums = new Float64Array(rows.nBin);
  for (let d = 2; d <= furthest; d++) {
    rebinCovariance(rows, rows, d, variance, covariance).forEach((value, b) => {
      if (!Number.isNaN(value)) sums[b] += 2 * value;
    });
  }
  return Array.from(sums, (sum, b) => sum / own[b]).filter((share, b) => b % 31 === 7 && Number.isFinite(share));
}
