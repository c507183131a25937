/** Finding the fibres: the peaks of a cut across the dispersion, and their centres by the joint linearised centring of
 * assembly/centring.ts, so that crowded and dim fibres stand where they are. */
import { medianOf } from "../detector/clip.js";
import { Centring, type CentringResult } from "../kernels/centring.js";
import type { Kernels } from "../kernels/module.js";
import type { Cut } from "./cut.js";
import { TraceError } from "./errors.js";

/** One ribbon of light where the cut meets it. */
export interface Peak {
  /** px */
  position: number;
  /** e⁻ of all its light in one column. */
  light: number;
  /** Its standard error, e⁻. */
  lightError: number;
  /** e⁻ above background in a pixel at the centre. */
  height: number;
  /** Gaussian σ, px. */
  sigma: number;
  /** e⁻ per pixel under it. */
  background: number;
  /** How far what is left without this fibre stands out from its flanks, as a share of what its light would: 1 for a
   * fibre, 0 for a step or a slope of the background. */
  standsOut: number;
}

/** A first peak must stand out from the pixels this far up and down, px. */
const FLANK = 2;
/** … by this many σ, by this share of its level, and by this share of a typical peak. */
const KAPPA_PEAK = 6;
const LEVEL_SHARE = 0.03;
const TYPICAL_SHARE = 0.03;
/** Light that counts as a fibre's, against the median fibre. */
const FAINTEST_SHARE = 0.02;
const START_SIGMAS = [0.85, 1.1, 1.4, 1.7];
const SIGMA_RANGE = [0.5, 2.6];
/** Light beyond this many σ from a centre is not the Gaussian's. */
export const REACH_SIGMAS = 4.5;

/** Peaks of the cut from low y upwards; fibres at least 4 px apart and about 2 to 4 px wide (FWHM) are told apart, down to
 * 5 % of the median one's light.
 * @throws TraceError when there is no fibre's light. */
export function findPeaks(kernels: Kernels, cut: Cut, name: string): Peak[] {
  const first = firstPeaks(cut);
  if (first.length === 0) {
    throw new TraceError(
      `${name}: no ribbon of light crosses column ${Math.round(cut.x)} (${medianOf(cut.mean).toFixed(0)} e⁻ per pixel in the median, without ` +
        "narrow peaks); a fibre flat, not a flat of the detector and with the lamp on, is needed to trace.",
    );
  }
  let peaks = centrePeaks(kernels, cut, first, bestSigma(kernels, cut, first), 6, true);
  peaks = keepReal(peaks);
  if (peaks.length < 0.5 * first.length) {
    throw new TraceError(
      `${name}: ${first.length} ribbons of light cross column ${Math.round(cut.x)}, but only ${peaks.length} of them can be told from ` +
        "their neighbours and the background; fibres must stand about 1.3 times their FWHM apart to be traced.",
    );
  }
  const holes = holePositions(peaks, cut.mean.length);
  if (holes.length > 0) {
    const tried = [...peaks.map((peak) => peak.position), ...holes].sort((a, b) => a - b);
    const still = new Set(holes);
    const sigma = medianOf(peaks.map((peak) => peak.sigma));
    const lights = centrePeaks(kernels, cut, tried, sigma, 2, false);
    const typical = medianOf(peaks.map((peak) => peak.light));
    const found = lights.filter(
      (peak) =>
        !still.has(peak.position) ||
        (Math.min(1, peak.standsOut) * peak.light > 1.2 * FAINTEST_SHARE * typical &&
          peak.light > 8 * peak.lightError &&
          peak.standsOut > 0.5),
    );
    if (found.length > peaks.length) {
      const positions = found.map((peak) => peak.position);
      peaks = keepReal(centrePeaks(kernels, cut, positions, sigma, 3, true));
    }
  }
  return peaks;
}

/** The σ that leaves least, of a few: crowded fibres that nearly melt are only told from background by the right one. */
function bestSigma(kernels: Kernels, cut: Cut, positions: number[]): number {
  const centre = Float64Array.from(positions);
  const rest = START_SIGMAS.map((sigma) => {
    const { model } = new CutCentring(kernels, cut, centre).measure(centre, sigma, 2);
    let sum = 0;
    cut.mean.forEach((d, y) => {
      if (!Number.isNaN(d) && model[y] !== 0) sum += Math.abs(d - model[y]);
    });
    return sum;
  });
  return START_SIGMAS[rest.indexOf(Math.min(...rest))];
}

/** Local maxima of what stands out from its flanks. */
function firstPeaks(cut: Cut): number[] {
  const { mean, fixedVariance, variancePerElectron } = cut;
  const ny = mean.length;
  const filled = mean.map((value, y) => (Number.isNaN(value) ? nearestGood(mean, y) : value));
  const at = (y: number) => filled[Math.max(0, Math.min(ny - 1, y))];
  const excess = Float64Array.from({ length: ny }, (_, y) => at(y) - 0.5 * (at(y - FLANK) + at(y + FLANK)));
  const candidates: { y: number; excess: number }[] = [];
  for (let y = 0; y < ny; y++) {
    const e = excess[y];
    if (!(e > 0) || e < (excess[y - 1] ?? 0) || e <= (excess[y + 1] ?? 0)) continue;
    const noise = Math.sqrt(1.5 * (fixedVariance[y] + variancePerElectron[y] * Math.max(0, at(y))));
    if (!(e > KAPPA_PEAK * noise && e > LEVEL_SHARE * at(y))) continue;
    const [low, high] = [excess[y - 1] ?? 0, excess[y + 1] ?? 0];
    candidates.push({ y: y + ((0.5 * (low - high)) / Math.min(-1e-9, low - 2 * e + high)) * -1, excess: e });
  }
  const strong = candidates.map((c) => c.excess).sort((a, b) => a - b);
  const typical =
    strong.length > 0 ? medianOf(strong.filter((e) => e > 0.2 * strong[Math.floor(0.9 * (strong.length - 1))])) : 0;
  const kept = candidates.filter((c) => c.excess > TYPICAL_SHARE * typical);
  return apart(kept).map((c) => c.y);
}

function nearestGood(values: Float64Array, y: number): number {
  for (let d = 1; d < values.length; d++) {
    const sides = [values[y - d], values[y + d]].filter((v) => Number.isFinite(v));
    if (sides.length > 0) return sides.reduce((sum, v) => sum + v, 0) / sides.length;
  }
  return 0;
}

/** Of two maxima closer than 2.5 px only the stronger. */
function apart(candidates: { y: number; excess: number }[]): { y: number; excess: number }[] {
  const kept: { y: number; excess: number }[] = [];
  for (const candidate of candidates) {
    const last = kept[kept.length - 1];
    if (last !== undefined && candidate.y - last.y < 2.5) {
      if (candidate.excess > last.excess) kept[kept.length - 1] = candidate;
    } else kept.push(candidate);
  }
  return kept;
}

/** Light that is certain and not negligible. */
function keepReal(peaks: Peak[]): Peak[] {
  const typical = medianOf(peaks.map((peak) => peak.light).filter((light) => light > 0));
  return peaks.filter((peak) => peak.light > FAINTEST_SHARE * typical && peak.light > KAPPA_PEAK * peak.lightError);
}

/** Where fibres might be too dim to have been seen: the places one pitch apart in each hole of up to six pitches. */
function holePositions(peaks: Peak[], ny: number): number[] {
  const spacing = peaks.slice(1).map((peak, j) => peak.position - peaks[j].position);
  if (spacing.length < 3) return [];
  const pitch = medianOf(spacing);
  const holes = spacing.flatMap((d, j) => {
    const n = Math.round(d / pitch);
    if (n < 2 || n > 6 || Math.abs(d / n - pitch) > 0.2 * pitch) return [];
    return Array.from({ length: n - 1 }, (_, m) => peaks[j].position + ((m + 1) * d) / n);
  });
  return [peaks[0].position - pitch, ...holes, peaks[peaks.length - 1].position + pitch].filter(
    (y) => y > 1 && y < ny - 2,
  );
}

/** Fibres that overlap: how many places apart light of this reach can meet. */
export function overlapping(reach: number, pitch: number): number {
  return Math.max(1, Math.min(3, Math.floor((2 * reach) / pitch)));
}

/** Joint centring of given peaks; with `move`, centres follow the light, and one σ for all follows the widths. */
function centrePeaks(
  kernels: Kernels,
  cut: Cut,
  positions: number[],
  startSigma: number,
  nRound: number,
  move: boolean,
): Peak[] {
  const centre = Float64Array.from(positions);
  const limit = 0.12 * pitchOf(centre);
  const nPar = move ? 3 : 2;
  let sigma = startSigma;
  const centring = new CutCentring(kernels, cut, centre);
  let peaks: Peak[] = [];
  for (let round = 0; round < nRound; round++) {
    const { solution, variance, background, model } = centring.measure(centre, sigma, nPar);
    const brightest = solution.reduce((best, value, i) => (i % nPar === 0 ? Math.max(best, value) : best), 0);
    const widening: number[] = [];
    for (let k = 0; k < centre.length; k++) {
      const a = solution[k * nPar];
      if (!move || a <= 0.003 * brightest) continue;
      centre[k] += Math.max(-limit, Math.min(limit, solution[k * nPar + 1] / a));
      if (a > 0.2 * brightest) widening.push(solution[k * nPar + 2] / a);
    }
    if (widening.length > 0) sigma += Math.max(-0.25, Math.min(0.25, medianOf(widening)));
    sigma = Math.max(SIGMA_RANGE[0], Math.min(SIGMA_RANGE[1], sigma));
    peaks = Array.from(centre, (position, k) => ({
      position,
      light: solution[k * nPar],
      lightError: Math.sqrt(variance[k * nPar]),
      height: (solution[k * nPar] * 0.3989422804014327) / sigma,
      sigma,
      background: backgroundAt(background, position, cut.mean.length),
      standsOut: standsOut(cut.mean, model, position, solution[k * nPar], sigma),
    }));
  }
  return peaks.sort((a, b) => a.position - b.position);
}

/** Joint centring of the cut, all widths alike; each is weighted by the variance of the last one's model. */
class CutCentring {
  private readonly centring: Centring;
  private readonly near: number;

  constructor(kernels: Kernels, cut: Cut, centre: Float64Array) {
    const pitch = pitchOf(centre);
    const reach = Math.min(REACH_SIGMAS * 1.8, 1.5 * pitch);
    const neighbours = overlapping(reach, pitch);
    const size = { nRow: cut.mean.length, nFibre: centre.length, nColumn: 1, neighbours, reach, nBack: 3 };
    this.centring = new Centring(kernels, size);
    this.near = 1.3 * pitch;
    this.centring.place(0, {
      ...cut,
      data: cut.mean,
      good: Uint8Array.from(cut.mean, (d) => (Number.isNaN(d) ? 0 : 1)),
    });
  }

  measure(centre: Float64Array, sigma: number, nPar: 2 | 3): CentringResult & { model: Float64Array } {
    this.centring.guess(0, { centre, sigma: new Float64Array(centre.length).fill(sigma) });
    this.centring.measure({ nPar, nRound: 1, near: this.near, relativeError: 0.02, kappa: 0, rejectError: 0 });
    return { ...this.centring.result(0), model: this.centring.model(0) };
  }
}

function pitchOf(positions: Float64Array): number {
  return positions.length > 1 ? medianOf(positions.slice(1).map((y, k) => y - positions[k])) : 10;
}

function backgroundAt(background: Float64Array, y: number, ny: number): number {
  const t = (2 * y) / (ny - 1) - 1;
  return background[0] + background[1] * t + background[2] * (1.5 * t * t - 0.5);
}

function standsOut(data: Float64Array, model: Float64Array, centre: number, light: number, sigma: number): number {
  const y = Math.round(centre);
  const row = (at: number) => (at >= 0 && at < data.length ? data[at] - model[at] : Number.NaN);
  // A Gaussian's light in a pixel, roughly; its share of the whole does not matter to a ratio near 1.
  const unit = (at: number) => gaussianShape((at - centre) / sigma) / (sigma * 2.5066282746310002);
  // One pixel to either side and no more: there the neighbours' tails, whose shape is not a Gaussian's, are still faint.
  const expected = light * (unit(y) - 0.5 * (unit(y - 1) + unit(y + 1)));
  const rest = row(y) - 0.5 * (row(y - 1) + row(y + 1));
  return (rest + expected) / expected;
}

/** exp(−v²/2) as (1 + v²/16)⁻⁸: near enough to compare shapes, and the same bits on every engine. */
function gaussianShape(v: number): number {
  const base = 1 / (1 + (v * v) / 16);
  const square = base * base * base * base;
  return square * square;
}
