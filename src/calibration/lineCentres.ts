/** Lines of an arc's spectra, found and centred: every fibre's peaks, fitted as pixel-integrated Gaussians on a straight
 * continuum (lineModel.ts), neighbours together. The width that lines have thereabouts (lineWidths.ts) is a prior for faint
 * lines, and tells blends: two lines within a width look like one that is too broad, and its centre is neither's. */
import { SIGMA_PER_MAD } from "../detector/clip.js";
import { type Spectra, UNUSABLE } from "../extraction/spectra.js";
import { Flag } from "../reference/bits.js";
import { median } from "../reference/median.js";
import { FWHM_PER_SIGMA, fitLines, type LineFit } from "./lineModel.js";
import { findLinePeaks, type LineSpectrum, type RawPeak, roughFwhm } from "./linePeaks.js";
import { fitLineWidths, type LineWidths, widthAt } from "./lineWidths.js";

export interface ArcPeak {
  /** Column from 0, and its standard error. Of a saturated line only roughly, with an error of one width. */
  x: number;
  error: number;
  /** Full width at half maximum, columns, and its error. */
  fwhm: number;
  fwhmError: number;
  /** All of its light, e⁻, and that over its error. */
  electrons: number;
  snr: number;
  saturated: boolean;
  /** Not one lone line: too near to another, too broad or too narrow, or of another shape than lines nearby. Its centre is not
   * to be trusted. */
  blended: boolean;
}

export interface LineCentres {
  /** [fibre]: peaks from the first column on; none for a dead fibre. */
  peaks: ArcPeak[][];
  /** Null when there is no line. */
  widths: LineWidths | null;
}

/** Of a fit's stretch beyond its outermost lines, FWHM. */
const reachFwhm = 1.6;
/** Lines nearer than this are one blend, FWHM, unless the model fits both. */
const blendFwhm = 1.5;
/** Lines fitted together, at the most. */
const mostTogether = 4;
/** A width off by this many σ, and by this share, is a blend's (or a cosmic ray's). */
const widthSigma = 5;
const widthShare = 0.04;
/** A line whose shape differs from the model by this many times what others' does. */
const shapeSigma = 6;
const shapeShare = 0.02;
/** What the width of one line is known to beforehand, as a share, at best. */
const priorShare = 0.01;
/** Lines that tell the width. */
const tellingSnr = 15;
/** Fibres that the first guess of the width is made from. */
const fewFibres = 15;

interface Group {
  fibre: number;
  peaks: RawPeak[];
  from: number;
  to: number;
  fit: LineFit | null;
}

/** @param slit nFibre, places of the fibres along the slit on [−1, 1]. */
export function findLineCentres(spectra: Spectra, slit: Float64Array): LineCentres {
  const { nFibre, nx } = spectra;
  const rows = Array.from({ length: nFibre }, (_, k) => lineSpectrum(spectra, k));
  const step = Math.max(1, Math.floor(nFibre / fewFibres));
  const rough = roughFwhm(rows.filter((_, k) => k % step === Math.floor(step / 2)));
  if (Number.isNaN(rough)) return { peaks: rows.map(() => []), widths: null };
  // Half-way points of a pixelated profile lie further apart than those of the profile itself.
  const fwhm = Math.sqrt(Math.max(rough * rough - 0.46, 0.5 * rough * rough));
  const groups = rows.flatMap((row, k) => groupsOf(row, k, fwhm));
  for (const group of groups) fitGroup(group, rows[group.fibre], fwhm / FWHM_PER_SIGMA);
  const widths = fitLineWidths(groups.flatMap(widthPoints), slit, nx);
  if (widths === null) return { peaks: rows.map(() => []), widths: null };
  for (const group of groups) refit(group, rows[group.fibre], widths, nx);
  const strange = strangeShape(groups);
  const peaks: ArcPeak[][] = rows.map(() => []);
  for (const group of groups) peaks[group.fibre].push(...arcPeaks(group, widths, strange, nx));
  return { peaks, widths };
}

/** Points that a cosmic ray was cut out of are left out: what it spilled beyond the cut pixels is still there. */
export function lineSpectrum({ flux, variance, flags, nx }: Spectra, k: number): LineSpectrum {
  const row = flags.subarray(k * nx, (k + 1) * nx);
  const own = Float64Array.from(variance.subarray(k * nx, (k + 1) * nx));
  row.forEach((bits, x) => {
    if ((bits & (UNUSABLE | Flag.cosmicRay)) !== 0) own[x] = Number.NaN;
  });
  return { nx, flux: Float64Array.from(flux.subarray(k * nx, (k + 1) * nx)), variance: own, flags: row };
}

/** Peaks whose stretches meet are fitted together. */
function groupsOf(row: LineSpectrum, fibre: number, fwhm: number): Group[] {
  const reach = Math.max(3, Math.ceil(reachFwhm * fwhm + 1));
  const groups: Group[] = [];
  for (const peak of findLinePeaks(row, fwhm)) {
    const from = Math.max(0, peak.top - reach);
    const to = Math.min(row.nx, peak.top + reach + 1);
    const last = groups[groups.length - 1];
    if (last !== undefined && from < last.to - 1) {
      last.peaks.push(peak);
      last.to = to;
    } else groups.push({ fibre, peaks: [peak], from, to, fit: null });
  }
  return groups.flatMap((group) => (group.peaks.length <= mostTogether ? [group] : parted(group, reach, row.nx)));
}

/** A long chain of lines, cut where they stand furthest apart. */
function parted(group: Group, reach: number, nx: number): Group[] {
  const { peaks } = group;
  if (peaks.length <= mostTogether) return [group];
  let cut = 1;
  const gap = (i: number) => peaks[i].top - peaks[i - 1].top;
  for (let i = 2; i < peaks.length; i++) if (gap(i) > gap(cut)) cut = i;
  // Each side's stretch ends half-way, so that neither has the other's line in it.
  const middle = Math.ceil((peaks[cut - 1].top + peaks[cut].top) / 2);
  const left = { ...group, peaks: peaks.slice(0, cut), to: Math.min(middle, peaks[cut - 1].top + reach + 1) };
  const right = { ...group, peaks: peaks.slice(cut), from: Math.max(middle, peaks[cut].top - reach) };
  left.to = Math.min(left.to, nx);
  return [...parted(left, reach, nx), ...parted(right, reach, nx)];
}

function fitGroup(group: Group, row: LineSpectrum, sigma: number, prior?: { sigma: number; error: number }): void {
  if (group.peaks.some(({ saturated }) => saturated)) return;
  const { fit } = group;
  const start = fit?.x ?? group.peaks.map(({ top }) => top);
  group.fit = fitLines(row.flux, row.variance, group.from, group.to, start, fit?.sigma ?? sigma, prior);
}

/** Once more with the width of the place as a prior, where the line itself does not know better. */
function refit(group: Group, row: LineSpectrum, widths: LineWidths, nx: number): void {
  const { fit, from, to } = group;
  const fwhm = widthAt(widths, group.fibre, (from + to - 1) / 2, nx);
  const error = Math.max(2 * widths.scatter, priorShare * fwhm);
  const own = (fit?.sigmaError ?? Number.POSITIVE_INFINITY) * FWHM_PER_SIGMA;
  if (own < 0.5 * error) return;
  // Light that is far too broad for a line is not pressed into one.
  if (fit !== null && Math.abs(fit.sigma * FWHM_PER_SIGMA - fwhm) > widthSigma * Math.sqrt(own * own + error * error))
    return;
  fitGroup(group, row, fwhm / FWHM_PER_SIGMA, { sigma: fwhm / FWHM_PER_SIGMA, error: error / FWHM_PER_SIGMA });
}

function widthPoints({ fibre, peaks, fit }: Group) {
  if (fit === null || !fit.converged || peaks.length > 1) return [];
  if (fit.electrons[0] < tellingSnr * fit.electronsError[0]) return [];
  return [
    { fibre, x: fit.x[0], fwhm: fit.sigma * FWHM_PER_SIGMA, fwhmError: fit.sigmaError * scale(fit) * FWHM_PER_SIGMA },
  ];
}

/** Errors grow by what the fit misses beyond noise. */
function scale({ chiSquare, freedom }: LineFit): number {
  return Math.max(1, Math.sqrt(chiSquare / freedom));
}

/** By how much of its light a fit misses its line, at least: beyond three standard deviations of what noise makes of χ². */
function misshapen({ chiSquare, freedom, lightSquare }: LineFit): number {
  return Math.sqrt(Math.max(0, chiSquare - freedom - 3 * Math.sqrt(2 * freedom)) / lightSquare);
}

/** From which misfit on a line's shape is another than the others'. */
function strangeShape(groups: Group[]): number {
  const all = groups.flatMap(({ fit }) => (fit === null || fit.lightSquare < 50 * 50 ? [] : [misshapen(fit)]));
  if (all.length === 0) return Number.POSITIVE_INFINITY;
  const typical = median(all);
  const scatter = SIGMA_PER_MAD * median(all.map((value) => Math.abs(value - typical)));
  return typical + shapeSigma * scatter + shapeShare;
}

function arcPeaks(group: Group, widths: LineWidths, strange: number, nx: number): ArcPeak[] {
  const { fit, peaks, fibre, from, to } = group;
  const usual = (x: number) => widthAt(widths, fibre, Math.min(Math.max(x, 0), nx - 1), nx);
  if (fit === null) return peaks.map((peak) => lostPeak(peak, usual(peak.top)));
  const factor = scale(fit);
  const fwhm = fit.sigma * FWHM_PER_SIGMA;
  const fwhmError = fit.sigmaError * factor * FWHM_PER_SIGMA;
  const order = [...fit.x.keys()].sort((a, b) => fit.x[a] - fit.x[b]);
  return order.map((i, rank) => {
    const x = fit.x[i];
    if (!(x > from - 1 && x < to)) return lostPeak(peaks[i], usual(peaks[i].top));
    const width = usual(x);
    const off = Math.abs(fwhm - width);
    const strangeWidth =
      off > widthShare * width && off > widthSigma * Math.sqrt(fwhmError * fwhmError + widths.scatter * widths.scatter);
    const near = [order[rank - 1], order[rank + 1]].some(
      (other) => other !== undefined && Math.abs(fit.x[other] - x) < blendFwhm * width,
    );
    const strangeLine = fit.lightSquare >= 50 * 50 && misshapen(fit) > strange;
    const lone = fit.converged && fit.electrons[i] > 0 && !strangeWidth && !strangeLine && !near;
    return {
      ...{ x, error: fit.error[i] * factor, fwhm, fwhmError, electrons: fit.electrons[i] },
      ...{ snr: fit.electrons[i] / fit.electronsError[i], saturated: false, blended: !lone },
    };
  });
}

function lostPeak({ top, height, saturated }: RawPeak, fwhm: number): ArcPeak {
  const electrons = height * fwhm * 1.0645; // area of a Gaussian of that height, √(π / (4 ln 2)) = 1.0645
  return { x: top, error: fwhm, fwhm, fwhmError: Number.NaN, electrons, snr: Number.NaN, saturated, blended: true };
}
