/** Where a spectrum rises to a narrow peak: first guesses for the centring of lines. */
import { SIGMA_PER_MAD } from "../detector/clip.js";
import { Flag } from "../reference/bits.js";
import { medianInPlace } from "../reference/median.js";

/** A peak's columns stand this many σ above the continuum, together; and its top this many above the lows beside it. */
const leastSigma = 8;
const leastProminence = 5;
/** Columns that a level of the continuum is the median of. */
const blockColumns = 40;
/** Points this near to the top, as a share of it, belong to it; a Gaussian has so few of them that more are a flat top. */
const topShare = 0.97;
const leastFlatSigma = 50;

/** One spectrum: rows of `Spectra`; `variance` NaN where the point is not to be used. */
export interface LineSpectrum {
  nx: number;
  flux: Float64Array;
  variance: Float64Array;
  flags: Int32Array;
}

export interface RawPeak {
  /** Column of the highest point. */
  top: number;
  /** e⁻ per column above the continuum. */
  height: number;
  saturated: boolean;
}

/** Peaks from the first column on. `fwhm`: of lines, columns, roughly. */
export function findLinePeaks(spectrum: LineSpectrum, fwhm: number): RawPeak[] {
  const { nx, variance } = spectrum;
  const half = Math.max(0, Math.round(fwhm / 4));
  const flux = half === 0 ? spectrum.flux : smoothed(spectrum, half);
  const continuum = levels(spectrum);
  const reach = Math.max(2, Math.ceil(1.5 * fwhm));
  const peaks: RawPeak[] = [];
  for (let x = 1; x < nx - 1; x++) {
    if (!(flux[x] > flux[x - 1] && flux[x] >= flux[x + 1])) continue;
    const low = Math.max(lowest(flux, x, -1, reach, nx), lowest(flux, x, 1, reach, nx));
    const noise = Math.sqrt(variance[x] / (2 * half + 1));
    if (!(flux[x] - low > leastProminence * noise * Math.SQRT2)) continue;
    if (!(together(spectrum, continuum, x) > leastSigma)) continue;
    const saturated = isFlat(spectrum, x, fwhm, continuum[x]);
    peaks.push({ top: x, height: flux[x] - continuum[x], saturated });
  }
  return withSaturated(peaks, spectrum, fwhm);
}

/** Typical full width at half maximum of the brightest peaks, by where the light falls to half; columns. NaN without any. */
export function roughFwhm(spectra: LineSpectrum[]): number {
  const widths: number[] = [];
  for (const spectrum of spectra) {
    const peaks = findLinePeaks(spectrum, 2.5).filter(({ saturated }) => !saturated);
    const bright = peaks.sort((a, b) => b.height - a.height).slice(0, 12);
    for (const { top, height } of bright) {
      const base = spectrum.flux[top] - height;
      const right = halfWay(spectrum.flux, top, 1, base + height / 2);
      const left = halfWay(spectrum.flux, top, -1, base + height / 2);
      if (Number.isFinite(left + right)) widths.push(left + right);
    }
  }
  return medianInPlace(Float64Array.from(widths), widths.length);
}

function halfWay(flux: Float64Array, top: number, step: number, half: number): number {
  for (let x = top + step; x >= 0 && x < flux.length; x += step) {
    if (flux[x] > half) continue;
    return Math.abs(x - top) - (half - flux[x]) / (flux[x - step] - flux[x]);
  }
  return Number.NaN;
}

/** The lowest value within `reach` of x on one side, before anything higher than x itself. */
function lowest(flux: Float64Array, x: number, step: number, reach: number, nx: number): number {
  let low = flux[x];
  for (let i = x + step; i >= 0 && i < nx && Math.abs(i - x) <= reach; i += step) {
    if (flux[i] > flux[x]) break;
    if (flux[i] < low) low = flux[i];
  }
  return low;
}

/** S/N of the point and its two neighbours above the continuum. */
function together({ flux, variance }: LineSpectrum, continuum: Float64Array, x: number): number {
  let [light, noise] = [0, 0];
  for (let i = x - 1; i <= x + 1; i++) {
    if (!(variance[i] > 0)) continue;
    light += flux[i] - continuum[x];
    noise += variance[i];
  }
  return light / Math.sqrt(noise);
}

function isFlat({ flux, variance }: LineSpectrum, x: number, fwhm: number, base: number): boolean {
  if (flux[x] - base < leastFlatSigma * Math.sqrt(variance[x])) return false;
  const limit = base + topShare * (flux[x] - base);
  let [first, last] = [x, x];
  while (flux[first - 1] >= limit) first--;
  while (flux[last + 1] >= limit) last++;
  // A Gaussian stays above 97 % over 0.21 of its FWHM.
  return last - first + 1 > 0.21 * fwhm + 2.5;
}

/** Runs of saturated points as one peak each; peaks within reach of one are saturated too. */
function withSaturated(peaks: RawPeak[], { flags, nx }: LineSpectrum, fwhm: number): RawPeak[] {
  const runs: RawPeak[] = [];
  for (let x = 0; x < nx; x++) {
    if ((flags[x] & Flag.saturated) === 0) continue;
    const first = x;
    while (x + 1 < nx && (flags[x + 1] & Flag.saturated) !== 0) x++;
    runs.push({ top: Math.round((first + x) / 2), height: Number.NaN, saturated: true });
    for (const peak of peaks) {
      if (peak.top >= first - 2 * fwhm && peak.top <= x + 2 * fwhm) peak.saturated = true;
    }
  }
  const far = runs.filter((run) => peaks.every((peak) => Math.abs(peak.top - run.top) > 2 * fwhm));
  return [...peaks, ...far].sort((a, b) => a.top - b.top);
}

function smoothed({ flux, nx }: LineSpectrum, half: number): Float64Array {
  const out = new Float64Array(nx);
  for (let x = 0; x < nx; x++) {
    let [sum, n] = [0, 0];
    for (let i = Math.max(0, x - half); i <= Math.min(nx - 1, x + half); i++) {
      if (!Number.isFinite(flux[i])) continue;
      sum += flux[i];
      n++;
    }
    out[x] = sum / n;
  }
  return out;
}

/** The continuum at every column: medians of blocks, those above most others held down, joined by straight lines. */
function levels({ nx, flux }: LineSpectrum): Float64Array {
  const nBlock = Math.max(1, Math.round(nx / blockColumns));
  const scratch = new Float64Array(Math.ceil(nx / nBlock) + 1);
  const medians = new Float64Array(nBlock);
  for (let b = 0; b < nBlock; b++) {
    let n = 0;
    for (let x = Math.floor((b * nx) / nBlock); x < Math.floor(((b + 1) * nx) / nBlock); x++) {
      if (Number.isFinite(flux[x])) scratch[n++] = flux[x];
    }
    medians[b] = n === 0 ? 0 : medianInPlace(scratch, n);
  }
  // Blocks full of lines have a median among the lines.
  const typical = medianInPlace(medians.slice(), nBlock);
  const off = medians.map((value) => Math.abs(value - typical));
  const limit = typical + 3 * SIGMA_PER_MAD * medianInPlace(off, nBlock);
  const level = (b: number) => Math.min(medians[Math.min(Math.max(b, 0), nBlock - 1)], limit);
  return Float64Array.from({ length: nx }, (_, x) => {
    const at = ((x + 0.5) * nBlock) / nx - 0.5;
    const b = Math.floor(at);
    return level(b) + (at - b) * (level(b + 1) - level(b));
  });
}
