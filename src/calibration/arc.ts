/** From the spectra of one or more arcs to the wavelength scale of every fibre: lines centred (lineCentres.ts), identified in one
 * fibre (identify.ts), followed to the others (followLines.ts), fitted together (dispersion.ts); then looked for once more in
 * every fibre of every exposure, each line where that fit has it, and fitted again. The first exposure defines the zero. */
import type { Spectra } from "../extraction/spectra.js";
import { legendreValue } from "../reference/legendre.js";
import { median } from "../reference/median.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { arcWarnings } from "./arcWarnings.js";
import { blendPulls } from "./blends.js";
import { type DispersionFit, fitDispersion } from "./dispersion.js";
import type { DispersionFrame, LinePoint } from "./dispersionSystem.js";
import { CalibrationError } from "./errors.js";
import { followLines, pairUp } from "./followLines.js";
import { type Identification, identify } from "./identify.js";
import type { LineList } from "./lamps.js";
import { type ArcPeak, findLineCentres } from "./lineCentres.js";
import { fitLineWidths, type WidthPoint } from "./lineWidths.js";
import type { Medium } from "./medium.js";
import { columnAt, dispersionAt, type WavelengthSolution } from "./wavelengths.js";

export interface ArcExposure {
  /** What to call it in messages. */
  name: string;
  spectra: Spectra;
}

/** One peak of one fibre in one exposure that a line of the list was found for. */
export interface ArcLine {
  fibre: number;
  exposure: number;
  line: number;
  peak: ArcPeak;
  /** Columns by which it was seen beyond where the solution has it; NaN when it took no part in the fit. */
  residual: number;
  used: boolean;
  /** Why it is not used. */
  why: "" | "saturated" | "blended" | "crowded" | "line off" | "clipped" | "few lines";
}

export interface ArcResult {
  solution: WavelengthSolution;
  list: LineList;
  lines: ArcLine[];
  fit: DispersionFit;
  identification: Identification;
  /** Fibre, from 0, in which the lines were identified. */
  identifiedIn: number;
  /** Peaks for which the list has no line: how many, in all fibres. */
  nUnknown: number;
  nPeak: number;
  warnings: string[];
}

/** Peaks this near to where a line is expected are it, FWHM. */
const nearFwhm = 0.4;
/** Lines nearer than this are not two peaks, FWHM; a companion that may pull a line by more columns than this spoils it. */
const unresolvedFwhm = 1.5;
const mostPull = 0.2;
/** Lines are looked for this share of the columns beyond the outermost ones. */
const beyondShare = 0.1;
/** Peaks in several exposures this near are one line, FWHM. */
const sameFwhm = 0.6;

/** @param list lines in the medium that the solution is to have. @param range Å at the first and the last column, roughly.
 * @throws CalibrationError when the lines cannot be identified beyond doubt, or are too few. */
export function measureWavelengths(
  exposures: readonly ArcExposure[],
  tramlines: Tramlines,
  list: LineList,
  range: readonly [number, number],
): ArcResult {
  const { nFibre, nx } = tramlines;
  const slit = slitPlaces(tramlines);
  const peaks = exposures.map(({ spectra }) => findLineCentres(spectra, slit).peaks);
  const fwhm = median(peaks.flat(2).flatMap((peak) => (peak.blended ? [] : [peak.fwhm])));
  if (!(fwhm > 0)) {
    const names = exposures.map(({ name }) => name).join(", ");
    throw new CalibrationError(
      `${names}: no spectrum has a line that stands out; is it an arc, with its lamp on and exposed long enough?`,
    );
  }
  const merged = Array.from({ length: nFibre }, (_, k) =>
    mergePeaks(
      peaks.map((one) => one[k]),
      fwhm,
    ),
  );
  const start = fullestFibre(merged);
  const identification = identify(merged[start], list, range, nx);
  const followed = followLines(merged, start, identification.matches, slit, nx, fwhm);
  const frame: DispersionFrame = { nFibre, nx, slit, nExposure: 1, wavelength: list.wavelength };
  const lit = Uint8Array.from(tramlines.state, (state) => (state === "dead" ? 0 : 1));
  const first = merged.flatMap((row, k) =>
    row.flatMap((peak, p) => (followed[k][p] < 0 || peak.blended ? [] : [pointOf(k, 0, followed[k][p], peak)])),
  );
  const rough = solutionOf(fitDispersion(frame, first, lit, true), tramlines, list.medium);
  const offsets = exposureOffsets(peaks, rough, list, fwhm);
  const pulls = pullsOf(list, rough, merged[start], identification, fwhm);
  const lines = peaks.flatMap((rows, exposure) =>
    rows.flatMap((row, k) => linesOfFibre(row, k, exposure, rough, list, offsets[exposure], fwhm)),
  );
  for (const one of lines) if (one.why === "" && pulls[one.line] > mostPull) one.why = "crowded";
  spoilMostlyBlended(lines);
  const inFit = lines.filter(({ why }) => why === "");
  const points = inFit.map(({ fibre, exposure, line, peak }) => pointOf(fibre, exposure, line, peak));
  const fit = fitDispersion({ ...frame, nExposure: exposures.length }, points, lit);
  noteUse(inFit, fit);
  const widths = inFit.flatMap(widthPoint);
  const solution = { ...solutionOf(fit, tramlines, list.medium), ...widthsOf(widths, slit, nx) };
  const nPeak = peaks.flat(2).length;
  const result = {
    solution,
    list,
    lines,
    fit,
    identification,
    identifiedIn: start,
    nPeak,
    nUnknown: nPeak - lines.length,
  };
  return { ...result, warnings: arcWarnings(result, exposures, range) };
}

/** nFibre: where each fibre crosses the middle column, on [−1, 1] from the first to the last. */
export function slitPlaces({ nFibre, degree, legendre }: Tramlines): Float64Array {
  const y = Float64Array.from({ length: nFibre }, (_, k) => legendreValue(legendre, 0, k * (degree + 1), degree + 1));
  const [low, high] = [y[0], y[nFibre - 1]];
  return y.map((value) => (high > low ? (2 * (value - low)) / (high - low) - 1 : 0));
}

function pointOf(fibre: number, exposure: number, line: number, { x, error }: ArcPeak): LinePoint {
  return { fibre, exposure, line, x, error };
}

/** One fibre's peaks of all exposures, each line once: as the exposure has it that shows it best. */
function mergePeaks(rows: ArcPeak[][], fwhm: number): ArcPeak[] {
  const all = rows.flat().sort((a, b) => a.x - b.x);
  if (rows.length === 1) return all;
  const kept: ArcPeak[] = [];
  for (const peak of all) {
    const last = kept[kept.length - 1];
    if (last === undefined || peak.x - last.x > sameFwhm * fwhm) kept.push(peak);
    else if (isBetter(peak, last)) kept[kept.length - 1] = peak;
  }
  return kept;
}

function isBetter(a: ArcPeak, b: ArcPeak): boolean {
  if (a.blended !== b.blended) return b.blended;
  return a.snr > b.snr;
}

/** The fibre with most lone peaks, of equals the one nearest to the middle. */
function fullestFibre(peaks: ArcPeak[][]): number {
  const lone = peaks.map((row) => row.filter(({ blended }) => !blended).length);
  const middle = (peaks.length - 1) / 2;
  const off = (k: number) => Math.abs(k - middle);
  // The ends of the slit see other wavelengths than the range was given for.
  const inner = [...peaks.keys()].filter((k) => off(k) <= Math.max(1, peaks.length / 4));
  const most = Math.max(...inner.map((k) => lone[k]));
  return inner.filter((k) => lone[k] >= 0.95 * most).reduce((a, b) => (off(b) < off(a) ? b : a));
}

function linesOfFibre(
  peaks: ArcPeak[],
  fibre: number,
  exposure: number,
  solution: WavelengthSolution,
  list: LineList,
  offset: number,
  fwhm: number,
): ArcLine[] {
  const { nx, seenFrom, seenTo } = solution;
  const beyond = beyondShare * nx;
  const places = Array.from(list.wavelength, (wavelength, line) => ({
    line,
    x: columnAt(solution, fibre, wavelength, fwhm) + offset,
  })).filter(({ x }) => x > seenFrom[fibre] - beyond && x < seenTo[fibre] + beyond);
  return pairUp(peaks, places, () => 0, nearFwhm * fwhm).map(({ peak: p, place }) => {
    const peak = peaks[p];
    const why = peak.saturated ? "saturated" : peak.blended ? "blended" : "";
    return { fibre, exposure, line: places[place].line, peak, residual: Number.NaN, used: false, why };
  });
}

/** A line that is a blend in most fibres is one in all: where it passes, chance has made it look narrow. */
function spoilMostlyBlended(lines: ArcLine[]): void {
  const seen = new Map<number, { all: number; blended: number }>();
  for (const { line, why } of lines) {
    const count = seen.get(line) ?? { all: 0, blended: 0 };
    count.all++;
    if (why === "blended") count.blended++;
    seen.set(line, count);
  }
  for (const one of lines) {
    const { all, blended } = seen.get(one.line)!;
    if (one.why === "" && 2 * blended > all) one.why = "blended";
  }
}

/** nExposure, columns: how far each exposure's lines lie from where the first fit of all together has them. */
function exposureOffsets(peaks: ArcPeak[][][], rough: WavelengthSolution, list: LineList, fwhm: number): number[] {
  if (peaks.length === 1) return [0];
  return peaks.map((rows, exposure) => {
    const off = rows.flatMap((row, k) =>
      linesOfFibre(row, k, exposure, rough, list, 0, fwhm).map(
        ({ peak, line }) => peak.x - columnAt(rough, k, list.wavelength[line], fwhm),
      ),
    );
    return off.length === 0 ? 0 : median(off);
  });
}

/** By row of the list, columns that companions may pull the line by. */
function pullsOf(
  list: LineList,
  solution: WavelengthSolution,
  peaks: ArcPeak[],
  { matches }: Identification,
  fwhm: number,
): Float64Array {
  const middle = (solution.nx - 1) / 2;
  const fibre = [...solution.nLine.keys()].reduce((a, b) => (solution.nLine[b] > solution.nLine[a] ? b : a));
  const perPixel = Math.abs(dispersionAt(solution, fibre, middle));
  const wavelengths = matches.map(({ line }) => list.wavelength[line]);
  const seen = matches.map(({ peak, line }) => ({ line, electrons: peaks[peak].electrons }));
  const faintest = Math.min(...peaks.map(({ electrons }) => (electrons > 0 ? electrons : Number.POSITIVE_INFINITY)));
  const ends: [number, number] = [Math.min(...wavelengths), Math.max(...wavelengths)];
  return blendPulls(list, seen, ends, faintest, unresolvedFwhm * fwhm * perPixel).map((pull) => pull / perPixel);
}

function noteUse(lines: ArcLine[], { used, residual, dropped, nLine }: DispersionFit): void {
  const off = new Set(dropped.map(({ line }) => line));
  lines.forEach((one, p) => {
    one.used = used[p] === 1;
    one.residual = residual[p];
    if (one.used) return;
    one.why = off.has(one.line) ? "line off" : nLine[one.fibre] === 0 ? "few lines" : "clipped";
  });
}

function solutionOf(fit: DispersionFit, { nFibre, nx, geometryDigest }: Tramlines, medium: Medium) {
  const { degree, legendre, nLine, rms, seenFrom, seenTo, error } = fit;
  return {
    ...{ nFibre, nx, medium, degree, legendre, nLine, rms, seenFrom, seenTo, error, geometryDigest },
    ...{ fwhmDegree: 0, fwhm: new Float64Array(nFibre).fill(Number.NaN) },
  };
}

function widthPoint({ used, fibre, peak: { x, fwhm, fwhmError } }: ArcLine): WidthPoint[] {
  return used && fwhmError < 0.1 * fwhm ? [{ fibre, x, fwhm, fwhmError }] : [];
}

function widthsOf(points: WidthPoint[], slit: Float64Array, nx: number) {
  const widths = fitLineWidths(points, slit, nx);
  if (widths === null) return {};
  return { fwhmDegree: widths.degree, fwhm: widths.coefficients };
}
