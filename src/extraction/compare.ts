/** The methods side by side on one frame, without truth: what weighting gains, and what a plain sum leaks. */
import type { Frame } from "../detector/frame.js";
import { loadKernels } from "../kernels/module.js";
import { median } from "../reference/median.js";
import { checkGeometry } from "../tramlines/file.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { adaptTramlines } from "./adapt.js";
import { type ExtractionOptions, extractFrame } from "./extract.js";
import { type Method, type Spectra, UNUSABLE } from "./spectra.js";

/** A neighbour this many times brighter makes a point a witness of leaked light. */
const witnessContrast = 30;
/** S/N from which on a flux ratio says something. */
const ratioSignalToNoise = 10;

export interface MethodComparison {
  method: Method;
  crosstalkCorrected: boolean;
  /** Median flux / σ per dispersion pixel over points that are good in every method. */
  medianSignalToNoise: number;
  /** Exposure time that the corrected boxcar would need for the same S/N, over the one taken: median of the ratio of
   * variances, which is the ratio of times where noise grows as the square root of light. */
  equivalentExposure: number;
  /** The same over the faintest quarter of the points. */
  equivalentExposureFaint: number;
  /** Median flux over that of joint, points of S/N above 10; NaN when there are none. */
  fluxRatio: number;
  /** Mean of (flux − flux of joint) / flux of the brighter neighbour, over points beside a fibre 30 times brighter: light
   * that this method counts twice. 0 for joint by construction; NaN without such points. */
  leakedShare: number;
  /** Wall clock of this extraction, seconds. */
  seconds: number;
}

export interface Comparison {
  methods: MethodComparison[];
  /** Spectrum points good in every method. */
  nPoint: number;
  /** Of those, points beside a fibre 30 times brighter. */
  nWitness: number;
  warnings: string[];
}

/** Extracts the frame five times: joint, and optimal and boxcar with and without cross-talk correction. */
export async function compareMethods(
  frame: Frame,
  tramlines: Tramlines,
  options: ExtractionOptions = {},
): Promise<Comparison> {
  const cases: [Method, boolean][] = [
    ["joint", true],
    ["optimal", true],
    ["optimal", false],
    ["boxcar", true],
    ["boxcar", false],
  ];
  checkGeometry(frame, tramlines);
  // What the methods share is done once: the time of each is its own.
  const adapted = adaptTramlines(await loadKernels(), frame, tramlines, options);
  const runs: { spectra: Spectra; seconds: number }[] = [];
  let warnings: string[] = [];
  for (const [i, [method, crosstalk]] of cases.entries()) {
    const onProgress = (share: number) => options.onProgress?.((i + share) / cases.length);
    const begin = performance.now();
    const extraction = await extractFrame(frame, adapted.tramlines, {
      ...options,
      method,
      crosstalk,
      onProgress,
      shift: false,
      refine: false,
    });
    runs.push({ spectra: extraction.spectra, seconds: (performance.now() - begin) / 1000 });
    warnings = [...adapted.warnings, ...extraction.warnings];
  }
  const [joint, boxcar] = [runs[0].spectra, runs[3].spectra];
  const good = goodEverywhere(runs.map((run) => run.spectra));
  const faint = faintestQuarter(joint, good);
  const witnesses = besideBright(joint, good);
  const methods = runs.map(({ spectra, seconds }) => ({
    method: spectra.method,
    crosstalkCorrected: spectra.crosstalkCorrected,
    medianSignalToNoise: median(good.map((i) => spectra.flux[i] / Math.sqrt(spectra.variance[i]))),
    equivalentExposure: median(good.map((i) => boxcar.variance[i] / spectra.variance[i])),
    equivalentExposureFaint: median(faint.map((i) => boxcar.variance[i] / spectra.variance[i])),
    fluxRatio: fluxRatio(spectra, joint, good),
    leakedShare: mean(witnesses.map(({ point, bright }) => (spectra.flux[point] - joint.flux[point]) / bright)),
    seconds,
  }));
  return { methods, nPoint: good.length, nWitness: witnesses.length, warnings };
}

function goodEverywhere(all: Spectra[]): number[] {
  const good: number[] = [];
  for (let i = 0; i < all[0].flux.length; i++) {
    if (all.every(({ flags, variance }) => (flags[i] & UNUSABLE) === 0 && variance[i] > 0)) good.push(i);
  }
  return good;
}

function faintestQuarter(joint: Spectra, good: number[]): number[] {
  const sorted = Float64Array.from(good, (i) => joint.flux[i]).sort();
  const limit = sorted[sorted.length >> 2];
  return good.filter((i) => joint.flux[i] < limit);
}

function besideBright(joint: Spectra, good: number[]): { point: number; bright: number }[] {
  const { nx, nFibre, flux } = joint;
  return good.flatMap((point) => {
    const k = Math.floor(point / nx);
    const below = k > 0 ? flux[point - nx] : Number.NaN;
    const above = k + 1 < nFibre ? flux[point + nx] : Number.NaN;
    const bright = Math.max(below || 0, above || 0);
    const own = Math.max(flux[point], Math.sqrt(joint.variance[point]));
    return bright > witnessContrast * own ? [{ point, bright }] : [];
  });
}

function fluxRatio(spectra: Spectra, joint: Spectra, good: number[]): number {
  const strong = good.filter((i) => joint.flux[i] > ratioSignalToNoise * Math.sqrt(joint.variance[i]));
  return median(strong.map((i) => spectra.flux[i] / joint.flux[i]));
}

function mean(values: number[]): number {
  return values.length > 0 ? values.reduce((sum, value) => sum + value, 0) / values.length : Number.NaN;
}
