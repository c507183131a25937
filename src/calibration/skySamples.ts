/** A sky fibre's spectrum as samples of the sky: wavelength, light of a fibre of throughput 1, and two kinds of error.
 *
 *     noise of its own in each sample       v      (sampleVariance.ts)
 *     an error that goes on along the fibre τ² = (0.002 S)² + (5·10⁻⁴ · light of both next fibres)²
 *
 * τ is what throughput and cross-talk leave: next to a bright target the little that is not parted rightly is much of the
 * sky. It does not average out along x, so a sample weighs as 1/(v + m τ²), m the samples of this fibre that a cell between two
 * knots averages: at lines such a fibre counts like others, between them hardly. Both numbers were chosen on simulated
 * nights. */
import { quantileInPlace } from "../detector/clip.js";
import type { Spectra } from "../extraction/spectra.js";
import { type BSpline, cellWidths, splineValues } from "./bspline.js";
import { type FixedVariance, fixedVariance, modelVariance } from "./sampleVariance.js";

export interface SkyInput {
  /** As extracted, e⁻. */
  spectra: Spectra;
  /** nFibre × nx, Å; NaN where there is none. */
  wavelengths: Float64Array;
  /** nFibre × nx; null: all fibres pass the same. */
  relative: Float32Array | null;
  /** Rows, from 0, whose fibres see nothing but sky. */
  skyFibres: number[];
}

/** nx each, in light of a fibre of throughput 1. */
export interface SkySamples {
  /** Row, from 0. */
  fibre: number;
  /** Å */
  x: Float64Array;
  y: Float64Array;
  /** v; NaN where there is nothing to use. */
  variance: Float64Array;
  /** τ² */
  lasting: Float64Array;
  /** What the fit weighs by: 1/(v + m τ²), or 0. */
  weight: Float64Array;
  throughput: Float64Array;
  noise: FixedVariance;
  /** Light of both next fibres, smooth. */
  beside: Float64Array;
}

const THROUGHPUT_ERROR = 0.002;
const LEAK = 5e-4;
const HALF_WIDTH = 25;

export function skySamples({ spectra, wavelengths, relative }: SkyInput, fibre: number): SkySamples {
  const { nx, flux } = spectra;
  const from = fibre * nx;
  const throughput = Float64Array.from({ length: nx }, (_, i) => (relative === null ? 1 : relative[from + i]));
  const lit = (k: number) => (k >= 0 && k < spectra.nFibre ? smooth(flux.subarray(k * nx, (k + 1) * nx)) : null);
  const [below, above] = [lit(fibre - 1), lit(fibre + 1)];
  return {
    fibre,
    x: wavelengths.slice(from, from + nx),
    y: throughput.map((t, i) => flux[from + i] / t),
    variance: new Float64Array(nx),
    lasting: new Float64Array(nx),
    weight: new Float64Array(nx),
    throughput,
    noise: fixedVariance(spectra, fibre),
    beside: throughput.map((_, i) => (below?.[i] ?? 0) + (above?.[i] ?? 0)),
  };
}

/** Running median of what there is; 0 without anything. */
function smooth(flux: ArrayLike<number>): Float64Array {
  const near = new Float64Array(2 * HALF_WIDTH + 1);
  return Float64Array.from({ length: flux.length }, (_, x) => {
    let n = 0;
    for (let i = Math.max(0, x - HALF_WIDTH); i <= Math.min(flux.length - 1, x + HALF_WIDTH); i++) {
      if (Number.isFinite(flux[i])) near[n++] = flux[i];
    }
    return n === 0 ? 0 : Math.max(0, quantileInPlace(near, 0.5, n));
  });
}

/** Sets variances and weights for the sky of a fit, or, before there is one, for one level and cells of `wide` pixels. */
export function expectSky(samples: SkySamples, sky: BSpline | { level: number; wide: number }): void {
  const { x, y, variance, lasting, weight, noise, throughput, beside } = samples;
  const known = "knots" in sky;
  const light = known ? splineValues(sky, x) : null;
  const wide = known ? cellPixels(sky, x) : null;
  for (let i = 0; i < x.length; i++) {
    const t = throughput[i];
    const expected = light === null ? (sky as { level: number }).level : Number.isNaN(light[i]) ? 0 : light[i];
    const usable = Number.isFinite(x[i]) && Number.isFinite(y[i]) && t > 0;
    variance[i] = usable ? modelVariance(noise, i, expected * t) / (t * t) : Number.NaN;
    lasting[i] = (THROUGHPUT_ERROR * expected) ** 2 + ((LEAK * beside[i]) / t) ** 2;
    const nCell = wide === null ? (sky as { wide: number }).wide : wide[i];
    weight[i] = variance[i] > 0 ? 1 / (variance[i] + nCell * lasting[i]) : 0;
  }
}

/** Pixels of this fibre between the two knots about each sample, at least 1. */
export function cellPixels(sky: BSpline, x: Float64Array): Float64Array {
  return cellWidths(sky, x).map((width, i) => {
    const [low, high] = [Math.max(0, i - 1), Math.min(x.length - 1, i + 1)];
    return Math.max(1, (width * (high - low)) / Math.abs(x[high] - x[low]));
  });
}
