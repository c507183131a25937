/** Figures of merit of a wavelength scale. */
import type { ArcResult } from "../calibration/arc.js";
import { rmsOf } from "../calibration/arcWarnings.js";
import { dispersionAt, fwhmAt, wavelengthAt } from "../calibration/wavelengths.js";
import { medianOf } from "../detector/clip.js";

const lightKilometresPerSecond = 299792.458;

export interface WavelengthSummary {
  /** Å at the first and the last column, and Å per column in the middle: the fibres' medians. */
  range: [number, number];
  perPixel: number;
  /** Å: outermost lines used. */
  linesFrom: number;
  linesTo: number;
  rmsPixels: number;
  rmsKilometresPerSecond: number;
  errorPixels: number;
  worstRmsPixels: number;
  /** From 1. */
  worstFibre: number;
  fwhmPixels: number;
  /** λ/FWHM at the first, middle and last column. */
  resolution: [number, number, number];
  lamps: { lamp: string; lines: number; points: number }[];
  leftOut: LeftOut[];
}

/** A line that most fibres that have it do not use. */
export interface LeftOut {
  wavelength: number;
  lamp: string;
  reason: string;
  points: number;
  /** Å by which all fibres see it elsewhere; NaN unless that is the reason. */
  off: number;
}

export function summariseWavelengths(result: ArcResult): WavelengthSummary {
  const { solution, lines, list } = result;
  const { nFibre, nx } = solution;
  const fibres = Array.from({ length: nFibre }, (_, k) => k);
  const over = (value: (k: number) => number) => medianOf(fibres.map(value));
  const middle = (nx - 1) / 2;
  const used = lines.filter((one) => one.used);
  const wavelengths = used.map(({ line }) => list.wavelength[line]);
  const speeds = used.map(({ residual, line, fibre, peak }) => {
    const angstrom = residual * dispersionAt(solution, fibre, peak.x);
    return (angstrom / list.wavelength[line]) * lightKilometresPerSecond;
  });
  const seen = fibres.filter((k) => solution.nLine[k] > 0);
  const worst = seen.reduce((a, b) => (solution.rms[b] > solution.rms[a] ? b : a));
  const resolutionAt = (x: number) =>
    over((k) => wavelengthAt(solution, k, x) / Math.abs(fwhmAt(solution, k, x) * dispersionAt(solution, k, x)));
  return {
    range: [over((k) => wavelengthAt(solution, k, 0)), over((k) => wavelengthAt(solution, k, nx - 1))],
    perPixel: over((k) => dispersionAt(solution, k, middle)),
    linesFrom: wavelengths.reduce((a, b) => Math.min(a, b)),
    linesTo: wavelengths.reduce((a, b) => Math.max(a, b)),
    rmsPixels: rmsOf(lines),
    rmsKilometresPerSecond: Math.sqrt(speeds.reduce((sum, v) => sum + v * v, 0) / speeds.length),
    errorPixels: medianOf(solution.error ?? []),
    worstRmsPixels: solution.rms[worst],
    worstFibre: worst + 1,
    fwhmPixels: over((k) => fwhmAt(solution, k, middle)),
    resolution: [resolutionAt(0), resolutionAt(middle), resolutionAt(nx - 1)],
    lamps: lampCounts(result),
    leftOut: linesLeftOut(result),
  };
}

function lampCounts({ lines, list }: ArcResult): WavelengthSummary["lamps"] {
  const counts = new Map<string, { lines: Set<number>; points: number }>();
  for (const { line, used } of lines) {
    const count = counts.get(list.lamp[line]) ?? { lines: new Set(), points: 0 };
    if (used) {
      count.lines.add(line);
      count.points++;
    }
    counts.set(list.lamp[line], count);
  }
  return Array.from(counts, ([lamp, count]) => ({ lamp, lines: count.lines.size, points: count.points }));
}

function linesLeftOut({ lines, list, fit }: ArcResult): LeftOut[] {
  const byLine = new Map<number, string[]>();
  for (const { line, used, why } of lines) byLine.set(line, [...(byLine.get(line) ?? []), used ? "" : why]);
  const off = new Map(fit.dropped.map((one) => [one.line, one.off]));
  return [...byLine].flatMap(([line, reasons]) => {
    const out = reasons.filter((why) => why !== "");
    if (2 * out.length <= reasons.length) return [];
    const reason = out.reduce((a, b) => (count(out, b) > count(out, a) ? b : a));
    const { [line]: wavelength } = list.wavelength;
    return [{ wavelength, lamp: list.lamp[line], reason, points: out.length, off: off.get(line) ?? Number.NaN }];
  });
}

function count(list: string[], wanted: string): number {
  return list.filter((one) => one === wanted).length;
}
