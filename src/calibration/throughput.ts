/** What share of the light each fibre passes on, relative to the others, from light that is alike in all of them: twilight,
 * or a fibre flat.
 *
 *     F_k(x) = T_k(x) · C(λ_k(x)) + noise
 *
 * C is one spline in wavelength through all fibres, so that the twilight's absorption lines, which stand still in wavelength
 * and not in x, cancel; T_k is a spline in x with as few knots as the noise allows. Both are fitted in turns. A factor that
 * hangs on the wavelength alone could stand with T or with C; it is laid into C by the condition that at each wavelength
 * the median of the lit fibres is 1. (The median of each column would not do: with a bowed slit a column is another wavelength in
 * each fibre, and a slope that all share would be taken off in one and not in the other.)
 *
 * Light per column also counts how wide a column is in wavelength, as the light of the sky does: T holds that too. */
import { medianOf } from "../detector/clip.js";
import type { Spectra } from "../extraction/spectra.js";
import { clampedKnots, fitSpline, splineCovariances, splineValues } from "./bspline.js";
import { CalibrationError } from "./errors.js";
import { type FixedVariance, fixedVariance, modelVariance } from "./sampleVariance.js";
import { fitAdaptedSpline, robustFit } from "./splineKnots.js";
import { columnBetween, wavelengthBreaks } from "./wavelengthBreaks.js";

export interface Throughput {
  nFibre: number;
  nx: number;
  /** nFibre × nx: at each wavelength the median of the lit fibres is 1; NaN for dead ones. */
  relative: Float32Array;
  /** nFibre × nx: variance of `relative`. */
  variance: Float32Array;
  geometryDigest: string;
}

/** Fibres that the common spectrum is made of, at most. */
const MOST_FIBRES = 96;
/** Pixels between the closest knots of C, and of T; the widest cells are 2^HALVINGS of them. */
const COMMON_STEP = 0.7;
const COMMON_HALVINGS = 6;
const OWN_STEP = 16;
const TURNS = 4;

/** @param wavelengths nFibre × nx Å; a shift that all fibres share does no harm.
 * @throws CalibrationError when fewer than three fibres have light and wavelengths. */
export function measureThroughput(
  spectra: Spectra,
  wavelengths: Float64Array,
  geometryDigest: string,
  name = "the frame",
): Throughput {
  const { nFibre, nx, flux } = spectra;
  const lit = litFibres(spectra, wavelengths);
  if (lit.length < 3) {
    throw new CalibrationError(
      `${name}: only ${lit.length} of ${nFibre} fibres have both light and wavelengths, but throughput is a comparison of at least three; give a twilight or fibre-flat frame and the wavelengths of its readout.`,
    );
  }
  const noise = new Map(lit.map((k) => [k, fixedVariance(spectra, k)]));
  const levels = lit.map((k) => medianOf(flux.subarray(k * nx, (k + 1) * nx)));
  const middle = medianOf(levels);
  const relative = new Float64Array(nFibre * nx).fill(Number.NaN);
  const variance = new Float64Array(nFibre * nx).fill(Number.NaN);
  lit.forEach((k, i) => {
    relative.fill(levels[i] / middle, k * nx, (k + 1) * nx);
  });
  const some = lit.filter(
    (_, i) => Math.floor((i * MOST_FIBRES) / lit.length) !== Math.floor(((i - 1) * MOST_FIBRES) / lit.length),
  );
  const bench: Bench = { spectra, wavelengths, noise, relative, variance };
  const breaks = wavelengthBreaks(wavelengths, nx, lit, COMMON_STEP);
  let knots: Float64Array | undefined;
  for (let turn = 0; turn < TURNS; turn++) {
    const common = fitCommon(bench, some, breaks, turn < 2 ? undefined : knots);
    knots = common.knots;
    for (const k of lit) fitOwn(bench, k, splineValues(common, wavelengths.subarray(k * nx, (k + 1) * nx)));
  }
  normalise(bench, lit);
  return { nFibre, nx, relative: Float32Array.from(relative), variance: Float32Array.from(variance), geometryDigest };
}

interface Bench {
  spectra: Spectra;
  wavelengths: Float64Array;
  noise: Map<number, FixedVariance>;
  relative: Float64Array;
  variance: Float64Array;
}

/** Rows with light in most columns and with wavelengths. */
export function litFibres({ nFibre, nx, flux, variance }: Spectra, wavelengths: Float64Array): number[] {
  return Array.from({ length: nFibre }, (_, k) => k).filter((k) => {
    if (!Number.isFinite(wavelengths[k * nx])) return false;
    let n = 0;
    for (let i = k * nx; i < (k + 1) * nx; i++) if (flux[i] > 3 * Math.sqrt(variance[i])) n++;
    return n > nx / 2;
  });
}

/** C(λ), from F/T. */
function fitCommon(bench: Bench, fibres: number[], breaks: Float64Array, knots?: Float64Array) {
  const { spectra, wavelengths, noise, relative } = bench;
  const { nx, flux } = spectra;
  const n = fibres.length * nx;
  const samples = { x: new Float64Array(n), y: new Float64Array(n), weight: new Float64Array(n) };
  fibres.forEach((k, row) => {
    // Weights that change with the lines would favour their bottoms: the fibre's own level will do.
    const level = medianOf(flux.subarray(k * nx, (k + 1) * nx));
    for (let x = 0; x < nx; x++) {
      const [i, at] = [k * nx + x, row * nx + x];
      const v = modelVariance(noise.get(k)!, x, level);
      const t = relative[i];
      samples.x[at] = wavelengths[i];
      const usable = v > 0 && t > 0;
      samples.y[at] = usable ? flux[i] / t : 0;
      samples.weight[at] = usable ? (t * t) / v : 0;
    }
  });
  if (knots !== undefined) return robustFit(samples, samples.weight, knots);
  return fitAdaptedSpline(samples, breaks, COMMON_HALVINGS);
}

/** T_k(x), from F/C. */
function fitOwn({ spectra, noise, relative, variance }: Bench, k: number, common: Float64Array): void {
  const { nx, flux } = spectra;
  const own = noise.get(k)!;
  const x = Float64Array.from({ length: nx }, (_, column) => column);
  const y = new Float64Array(nx);
  const weight = x.map((column) => {
    const c = common[column];
    const v = modelVariance(own, column, c * relative[k * nx + column]);
    const usable = v > 0 && c > 0;
    y[column] = usable ? flux[k * nx + column] / c : 0;
    return usable ? (c * c) / v : 0;
  });
  const nFine = Math.max(1, Math.ceil((nx - 1) / OWN_STEP));
  let halvings = 0;
  while (2 ** (halvings + 2) <= nFine) halvings++;
  const breaks = Float64Array.from({ length: nFine + 1 }, (_, i) => ((nx - 1) * i) / nFine);
  const fit = fitAdaptedSpline({ x, y, weight }, breaks, halvings);
  const values = splineValues(fit, x);
  const pulls = y.map((value, i) => (weight[i] > 0 ? Math.abs(value - values[i]) * Math.sqrt(weight[i]) : Number.NaN));
  // Errors from what the fit misses where that is more than the noise.
  const excess = Math.max(1, medianOf(pulls) / MEDIAN_OF_PULLS) ** 2;
  relative.set(values, k * nx);
  variance.set(
    splineCovariances(fit, x, x).map((v) => v * excess),
    k * nx,
  );
}

/** Median of |pull| of a Gaussian. */
const MEDIAN_OF_PULLS = 0.6744897501960817;

/** Divides by the median over the lit fibres at each wavelength, smooth over some 32 pixels. */
function normalise({ spectra, wavelengths, relative, variance }: Bench, lit: number[]): void {
  const { nx } = spectra;
  const places = wavelengthBreaks(wavelengths, nx, lit, 8);
  const medians = places.map((wavelength) => medianAt(relative, wavelengths, nx, lit, wavelength));
  const first = medians.findIndex((value) => value > 0);
  let last = medians.length - 1;
  while (last > first && !(medians[last] > 0)) last--;
  if (first < 0) return;
  // Held constant where fewer than half of the fibres reach.
  const held = medians.map((_, p) => medians[Math.min(Math.max(p, first), last)]);
  const knots = clampedKnots(wavelengthBreaks(wavelengths, nx, lit, 32));
  const factors = fitSpline(knots, places, held, new Float64Array(places.length).fill(1));
  for (const k of lit) {
    const factor = splineValues(factors, wavelengths.subarray(k * nx, (k + 1) * nx));
    for (let x = 0; x < nx; x++) {
      relative[k * nx + x] /= factor[x];
      variance[k * nx + x] /= factor[x] * factor[x];
    }
  }
}

/** NaN where not more than half of the fibres reach. */
function medianAt(relative: Float64Array, wavelengths: Float64Array, nx: number, lit: number[], wavelength: number) {
  const there = lit.flatMap((k) => {
    const x = columnBetween(wavelengths, k * nx, nx, wavelength);
    if (Number.isNaN(x)) return [];
    const [low, share] = [Math.min(Math.floor(x), nx - 2), x - Math.min(Math.floor(x), nx - 2)];
    return [relative[k * nx + low] * (1 - share) + relative[k * nx + low + 1] * share];
  });
  return there.length > lit.length / 2 ? medianOf(there) : Number.NaN;
}
