/** The methods side by side on one frame, without truth: what weighting gains against what it could, what a plain sum leaks, how
 * far the methods agree, and which one serves each fibre. */
import type { Frame } from "../detector/frame.js";
import { loadKernels } from "../kernels/module.js";
import { median } from "../reference/median.js";
import { checkGeometry } from "../tramlines/file.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { adaptTramlines } from "./adapt.js";
import { type Agreement, measureAgreement } from "./agreement.js";
import { type Extraction, extractFrame } from "./extract.js";
import { BOXCAR, cases, type ExpectedColumn, expectedColumns, JOINT, type LoneGain, loneGain } from "./gain.js";
import { measureLeaks, type NeighbourLeak } from "./leakage.js";
import type { ExtractionOptions } from "./options.js";
import { type FibreAdvice, recommendMethods } from "./recommend.js";
import { scatterGains } from "./scatter.js";
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
  /** What profile and model variances let `equivalentExposure` be. */
  expectedExposure: number;
  /** The same as the scatter along the spectra shows it, in the fibres in which noise rules, and what the error bars promise
   * for those; NaN where there are none. */
  seenExposure: number;
  promisedExposure: number;
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
  halfAperturePixels: number;
  /** Of a fibre alone, with this profile and this aperture. */
  theory: LoneGain;
  /** Beside the brightest fibres. */
  leaks: NeighbourLeak[];
  /** Of each method with joint. */
  agreement: Agreement[];
  /** One for each slit position. */
  fibres: FibreAdvice[];
  warnings: string[];
}

/** Extracts the frame five times: joint, and optimal and boxcar with and without cross-talk correction. */
export async function compareMethods(
  frame: Frame,
  tramlines: Tramlines,
  options: ExtractionOptions = {},
): Promise<Comparison> {
  checkGeometry(frame, tramlines);
  // What the methods share is done once: the time of each is its own.
  const adapted = adaptTramlines(await loadKernels(), frame, tramlines, options);
  const runs: TimedRun[] = [];
  for (const [i, [method, crosstalk]] of cases.entries()) {
    const onProgress = (share: number) => options.onProgress?.((i + share) / cases.length);
    const begin = performance.now();
    const extraction = await extractFrame(frame, adapted.tramlines, {
      ...{ ...options, method, crosstalk, onProgress },
      ...{ shift: false, refine: false },
    });
    runs.push({ extraction, seconds: (performance.now() - begin) / 1000 });
  }
  const all = runs.map(({ extraction }) => extraction.spectra);
  const { fit, plan, warnings } = runs[JOINT].extraction;
  const columns = expectedColumns(fit);
  return {
    ...compareFigures(runs, columns),
    halfAperturePixels: fit.input.halfAperture,
    theory: loneGain(fit),
    leaks: measureLeaks(all, columns, plan.active, tramlines.fibre),
    agreement: measureAgreement(all, columns, plan.active),
    fibres: recommendMethods(all, columns, plan.active, tramlines),
    warnings: [...adapted.warnings, ...warnings],
  };
}

interface TimedRun {
  extraction: Extraction;
  seconds: number;
}

function compareFigures(runs: TimedRun[], columns: ExpectedColumn[]) {
  const all = runs.map(({ extraction }) => extraction.spectra);
  const { active } = runs[JOINT].extraction.plan;
  const [joint, boxcar] = [all[JOINT], all[BOXCAR]];
  const good = goodEverywhere(all);
  const faint = faintestQuarter(joint, good);
  const witnesses = besideBright(joint, good);
  const expected = expectedRatios(columns, active, new Set(good), joint.nx);
  const scatter = scatterGains(all, active);
  const methods = all.map((spectra, i) => ({
    method: spectra.method,
    crosstalkCorrected: spectra.crosstalkCorrected,
    medianSignalToNoise: median(good.map((at) => spectra.flux[at] / Math.sqrt(spectra.variance[at]))),
    equivalentExposure: median(good.map((at) => boxcar.variance[at] / spectra.variance[at])),
    equivalentExposureFaint: median(faint.map((at) => boxcar.variance[at] / spectra.variance[at])),
    expectedExposure: expected[i],
    seenExposure: scatter[i].seen,
    promisedExposure: scatter[i].promised,
    fluxRatio: fluxRatio(spectra, joint, good),
    leakedShare: mean(witnesses.map(({ point, bright }) => (spectra.flux[point] - joint.flux[point]) / bright)),
    seconds: runs[i].seconds,
  }));
  return { methods, nPoint: good.length, nWitness: witnesses.length };
}

/** Variance of the corrected boxcar over each case's, as the model expects them: medians over good points. */
function expectedRatios(columns: ExpectedColumn[], active: number[], good: Set<number>, nx: number): number[] {
  return cases.map((_, i) =>
    median(
      columns.flatMap(({ x, variance }) =>
        active.flatMap((row, k) => (good.has(row * nx + x) ? [variance[BOXCAR][k] / variance[i][k]] : [])),
      ),
    ),
  );
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
