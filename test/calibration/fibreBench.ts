/** A bench without a detector: spectra of fibres whose wavelengths, throughputs, light and noise are known exactly. */
import type { WavelengthSolution } from "../../src/calibration/wavelengths.js";
import { wavelengthImage } from "../../src/calibration/wavelengths.js";
import type { Spectra } from "../../src/extraction/spectra.js";
import { openStream } from "../../src/random/streams.js";

export const DIGEST = "bench";

export interface BenchShape {
  nFibre: number;
  nx: number;
  /** −1: wavelengths fall along x. */
  sign?: 1 | -1;
  dead?: number[];
}

/** 1.6 Å a pixel, the slit bowed by 12 px, each fibre off by some hundredths. */
export function benchSolution({ nFibre, nx, sign = 1, dead = [] }: BenchShape): WavelengthSolution {
  const dice = openStream(3, "solution");
  const legendre = new Float64Array(nFibre * 3);
  for (let k = 0; k < nFibre; k++) {
    const s = (2 * k) / (nFibre - 1) - 1;
    const offset = 1.6 * (12 * (1 - s * s) + 0.04 * dice.normal());
    const row = [6600 - sign * offset, sign * 0.8 * (nx - 1) * (1 + 2e-4 * s), 6];
    legendre.set(dead.includes(k) ? [Number.NaN, Number.NaN, Number.NaN] : row, 3 * k);
  }
  const each = (value: number) => new Float64Array(nFibre).fill(value);
  return {
    ...{ nFibre, nx, medium: "air", degree: 2, legendre, nLine: new Int32Array(nFibre).fill(30), rms: each(0.01) },
    ...{ seenFrom: each(0), seenTo: each(nx - 1), fwhmDegree: 0, fwhm: each(2.2), geometryDigest: DIGEST },
  };
}

/** Slowly changing along x, 8 % rms from fibre to fibre. */
export function benchThroughput({ nFibre, nx }: BenchShape, seed = 17): Float64Array {
  const dice = openStream(seed, "throughput");
  const image = new Float64Array(nFibre * nx);
  for (let k = 0; k < nFibre; k++) {
    const [level, slope, hump] = [1 + 0.08 * dice.normal(), 0.1 + 0.03 * dice.normal(), 0.05 * dice.uniform()];
    for (let x = 0; x < nx; x++) {
      const t = (2 * x) / (nx - 1) - 1;
      image[k * nx + x] = level * (1 + slope * t - hump * t * t);
    }
  }
  return image;
}

/** `light(λ, k, x)`: e⁻ per column in a fibre of throughput 1. Noise: Gaussian, its variance the light's and `fixed`; FLUX_VAR from
 * the noisy flux, as an extraction that does not know the truth gives it. */
export function benchSpectra(
  shape: BenchShape,
  wavelengths: Float64Array,
  throughput: Float64Array,
  light: (wavelength: number, k: number, x: number) => number,
  { fixed = 60, seed = 1 } = {},
): Spectra {
  const { nFibre, nx, dead = [] } = shape;
  const dice = openStream(seed, "noise");
  const n = nFibre * nx;
  const flux = new Float32Array(n);
  const variance = new Float32Array(n);
  for (let i = 0; i < n; i++) {
    const k = Math.floor(i / nx);
    const mean = throughput[i] * light(wavelengths[i], k, i % nx);
    flux[i] = dead.includes(k) ? Number.NaN : mean + Math.sqrt(mean + fixed) * dice.normal();
    variance[i] = dead.includes(k) ? Number.NaN : fixed + Math.max(flux[i], 0);
  }
  return {
    ...{ nFibre, nx, method: "joint", crosstalkCorrected: true, flux, variance },
    neighbourCovariance: new Float32Array(n).map((_, i) => (i < n - nx ? -3 : Number.NaN)),
    flags: new Int32Array(n).map((_, i) => (dead.includes(Math.floor(i / nx)) ? 1024 : 0)),
    chi2: new Float32Array(n).fill(1),
    background: new Float32Array(n),
  };
}

/** An unresolved line of so many electrons at `at` Å, 1.6 Å a pixel. */
export function benchLine(at: number, electrons: number): (wavelength: number) => number {
  const sigma = 1.5;
  return (wavelength) => {
    const u = (wavelength - at) / sigma;
    return Math.abs(u) > 8 ? 0 : (1.6 * electrons * Math.exp(-0.5 * u * u)) / (sigma * Math.sqrt(2 * Math.PI));
  };
}

/** Night sky: faint continuum and lines from bright to hardly seen. */
export function benchSky(): (wavelength: number) => number {
  const dice = openStream(23, "sky");
  const lines = Array.from({ length: 24 }, () =>
    benchLine(6250 + 700 * dice.uniform(), 10 ** (1.5 + 2.3 * dice.uniform())),
  );
  return (wavelength) => 120 + 0.02 * (wavelength - 6600) + lines.reduce((sum, line) => sum + line(wavelength), 0);
}

export { wavelengthImage };

/** 1.4826 · median |values|: robust standard deviation about 0. */
export function spreadAboutZero(values: number[]): number {
  const sorted = values.map(Math.abs).sort((a, b) => a - b);
  return 1.482602218505602 * sorted[sorted.length >> 1];
}
