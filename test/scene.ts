/** A small frame made for the extraction's own tests: uneven on purpose, so that a swapped index cannot hide.
 * Invented data. */

import type { ExtractionInput } from "../src/reference/extract.js";
import { legendreArgument, legendreValue } from "../src/reference/legendre.js";
import { gaussianWeights } from "../src/reference/profile.js";

export interface SceneOptions {
  nx: number;
  ny: number;
  nFibre: number;
  pitch: number;
  sigma: number;
  /** Movement of the tramlines from the middle to the ends, pixels. */
  bow: number;
  seed: number;
  /** Electrons of fibre k in column x. */
  flux: (k: number, x: number) => number;
  background: number;
  readNoise: number;
  calibrationImages: boolean;
}

export interface Scene {
  input: ExtractionInput;
  /** nFibre × nx, e⁻ */
  flux: Float64Array;
  options: SceneOptions;
}

/** Uniform numbers in [0, 1): the quick linear congruential generator of Numerical Recipes, high bits first. */
export function seeded(seed: number): () => number {
  let state = (seed * 2654435761) >>> 0;
  return () => {
    state = (Math.imul(state, 1664525) + 1013904223) >>> 0;
    return state / 2 ** 32;
  };
}

/** Normal deviate (Box & Muller 1958). */
export function normalDeviate(next: () => number): number {
  return Math.sqrt(-2 * Math.log(1 - next())) * Math.cos(2 * Math.PI * next());
}

/** Poisson deviate: inversion for small means, rounded normal beyond 1000, where the difference is out of reach here. */
export function poissonDeviate(mean: number, next: () => number): number {
  if (mean > 1000) return Math.max(0, Math.round(mean + Math.sqrt(mean) * normalDeviate(next)));
  let n = 0;
  for (let left = mean; left > 0; left -= 30) n += smallPoisson(Math.min(left, 30), next);
  return n;
}

function smallPoisson(mean: number, next: () => number): number {
  let n = 0;
  for (let product = next(); product > Math.exp(-mean); product *= next()) n++;
  return n;
}

export const defaults: SceneOptions = {
  nx: 61,
  ny: 97,
  nFibre: 17,
  pitch: 4.9,
  sigma: 1.04,
  bow: 0.7,
  seed: 1,
  flux: (k, x) => 20 * 10 ** (3 * Math.abs(Math.sin(k * 2.3 + x / 300))),
  background: 4,
  readNoise: 3.1,
  calibrationImages: false,
};

/** Frame, tramlines and truth; `noise: false` leaves the expected electrons as they are. */
export function makeScene(change: Partial<SceneOptions> = {}, noise = true): Scene {
  const options = { ...defaults, ...change };
  const { nx, ny, nFibre } = options;
  const next = seeded(options.seed);
  const trace = new Float64Array(nFibre * 4);
  const width = new Float64Array(nFibre * 2);
  for (let k = 0; k < nFibre; k++) {
    trace.set([7.3 + k * options.pitch + 0.2 * next(), 0.31 + 0.01 * k, options.bow, -0.05 * options.bow], 4 * k);
    width.set([options.sigma * (1 + 0.01 * next()), 0.02], 2 * k);
  }
  const flux = Float64Array.from({ length: nFibre * nx }, (_, i) => options.flux(Math.floor(i / nx), i % nx));
  const response = new Float32Array(nx * ny).fill(1);
  if (options.calibrationImages) for (let i = 0; i < nx * ny; i++) response[i] = 1 + 0.02 * (next() - 0.5);
  const electrons = expectedElectrons(options, trace, width, flux);
  if (noise) {
    for (let i = 0; i < nx * ny; i++) {
      const counts = poissonDeviate(electrons[i] * response[i], next) + options.readNoise * normalDeviate(next);
      electrons[i] = counts / response[i];
    }
  }
  const input: ExtractionInput = {
    nx,
    ny,
    nFibre,
    halfWindow: 6,
    wing: 0,
    blockColumns: 16,
    trace,
    nTrace: 4,
    width,
    nWidth: 2,
    electrons,
    mask: new Uint8Array(nx * ny),
    noise: noiseIngredients(options, response, next),
    background: { nX: 1, nY: 1, coefficients: Float64Array.of(options.background) },
    seen: Int32Array.from({ length: 2 * nFibre }, (_, i) => (i % 2 ? nx - 1 : 0)),
    bandwidth: 2,
    method: "joint",
    crosstalk: false,
    halfAperture: 2.5,
    profileError: 0.01,
    kappa: 0,
    growKappa: 0,
    minRounds: 2,
    maxRounds: 8,
    rejected: new Uint8Array(nx * ny),
  };
  return { input, flux, options };
}

function noiseIngredients(options: SceneOptions, response: Float32Array, next: () => number): ExtractionInput["noise"] {
  const { nx, ny, readNoise, calibrationImages } = options;
  const bandOfRow = Uint8Array.from({ length: ny }, (_, y) => (y > ny / 3 ? 1 : 0));
  const fixedVariance = Float32Array.from({ length: 2 * nx }, () => readNoise * readNoise);
  if (!calibrationImages) return { bandOfRow, fixedVariance };
  return {
    bandOfRow,
    fixedVariance,
    fixedVarianceImage: response.map((r) => (readNoise * readNoise) / (r * r)),
    inverseResponse: response.map((r) => 1 / r),
    responseRelativeVariance: response.map(() => 1e-6 * (1 + next())),
  };
}

function expectedElectrons(
  o: SceneOptions,
  trace: Float64Array,
  width: Float64Array,
  flux: Float64Array,
): Float32Array {
  const image = new Float32Array(o.nx * o.ny).fill(o.background);
  for (let x = 0; x < o.nx; x++) {
    const t = legendreArgument(x, o.nx);
    for (let k = 0; k < o.nFibre; k++) {
      const y = legendreValue(trace, t, 4 * k, 4);
      const first = Math.max(Math.round(y) - 9, 0);
      const weights = gaussianWeights(y, legendreValue(width, t, 2 * k, 2), first, Math.min(19, o.ny - first));
      for (let i = 0; i < weights.length; i++) image[(first + i) * o.nx + x] += flux[k * o.nx + x] * weights[i];
    }
  }
  return image;
}
