/** Steps of the light where one amplifier's pixels end and another's begin: a ratio of gains that is off shows there, as
 * does a zero level that is off under faint light. Lamp light is smooth across a seam, so a cubic through the columns on both
 * sides, with a step at the seam, is fitted to sums over strips of rows; the strips' scatter gives the error, so that
 * hits, bad pixels and structure are in it.
 *
 *     sum(t) = c₀ + c₁ t + c₂ t² + c₃ t³ + d · [t > 0],   step = d / c₀ */
import type { Region } from "./assemble.js";
import { clippedScatter, medianOf } from "./clip.js";
import type { Measured } from "./headerDisagreements.js";
import { invertPositive } from "./smoothLevel.js";

/** Pixels on each side of the seam. */
const REACH = 48;
const FEWEST_PIXELS = 16;
/** Rows summed, under fibres and under even light: several pitches, so that a tilted fibre's light leaves a strip slowly. */
const STRIP = 24;
const EVEN_STRIP = 12;
const FEWEST_STRIPS = 4;
/** Steps below this are as good as none: gains are given to three digits. */
const LEAST_STEP = 0.01;
const SURE_SIGMAS = 5;
const N_TERM = 5;

/** What `amplifierSeams` needs of a frame, ny × nx, after the detector's correction or before. */
export interface SeamFrame {
  name: string;
  nx: number;
  ny: number;
  electrons: Float32Array;
  mask: Uint8Array;
  /** Which part each amplifier read: x0 ≤ x < x1, y0 ≤ y < y1. */
  regions: Pick<Region, "x0" | "x1" | "y0" | "y1" | "amplifier">[];
}

export interface Seam {
  /** Amplifiers on the side of smaller and of larger pixel numbers. */
  before: number;
  after: number;
  /** Across which axis of the turned frame, and the first pixel (from 0) behind it. */
  axis: "x" | "y";
  at: number;
  /** Light just behind the seam over light just before it, less 1. */
  step: Measured;
}

/** Seams at which the step could be measured. Those between rows are asked only when `evenLight`: ribbons of light end
 * and begin there as they like.
 * @param evenLight the whole detector is lit, as by a detector flat. */
export function amplifierSeams(frame: SeamFrame, evenLight: boolean): Seam[] {
  const seams: Seam[] = [];
  const strip = evenLight ? EVEN_STRIP : STRIP;
  for (const a of frame.regions) {
    for (const b of frame.regions) {
      if (a.x1 === b.x0) {
        const from = Math.max(a.y0, b.y0);
        const to = Math.min(a.y1, b.y1);
        const reach = Math.min(REACH, a.x1 - a.x0, b.x1 - b.x0);
        const step = stepOf(frame, "x", b.x0, reach, from, to, strip);
        if (step) seams.push({ before: a.amplifier.number, after: b.amplifier.number, axis: "x", at: b.x0, step });
      }
      if (a.y1 === b.y0 && evenLight) {
        const from = Math.max(a.x0, b.x0);
        const to = Math.min(a.x1, b.x1);
        const reach = Math.min(REACH, a.y1 - a.y0, b.y1 - b.y0);
        const step = stepOf(frame, "y", b.y0, reach, from, to, strip);
        if (step) seams.push({ before: a.amplifier.number, after: b.amplifier.number, axis: "y", at: b.y0, step });
      }
    }
  }
  return seams;
}

/** One sentence for each step beyond 1 % and beyond doubt. */
export function seamWarnings(frame: SeamFrame, evenLight: boolean): string[] {
  return amplifierSeams(frame, evenLight)
    .filter(isStep)
    .map((seam) => seamSentence(frame.name, seam));
}

export function isStep({ step }: Seam): boolean {
  return Math.abs(step.value) > LEAST_STEP && Math.abs(step.value) > SURE_SIGMAS * step.error;
}

function seamSentence(name: string, { before, after, axis, at, step }: Seam): string {
  const percent = (value: number) => (100 * value).toFixed(2);
  const where = axis === "x" ? `columns ${at} and ${at + 1}` : `rows ${at} and ${at + 1}`;
  const side = step.value > 0 ? "more" : "less";
  return `${name}: amplifier ${after} shows ${percent(Math.abs(step.value))} ± ${percent(step.error)} % ${side} light than amplifier ${before} at the seam between them (${where} of the turned frame, from 1), so the ratio of their gains is off by that and every spectrum steps there; correct one gain in the spectrograph file.`;
}

function stepOf(
  frame: SeamFrame,
  axis: "x" | "y",
  seam: number,
  reach: number,
  from: number,
  to: number,
  strip: number,
): Measured | undefined {
  if (reach < FEWEST_PIXELS) return undefined;
  const nStrip = Math.floor((to - from) / strip);
  if (nStrip < FEWEST_STRIPS) return undefined;
  const design = designOf(reach);
  const strips: { level: number; step: number }[] = [];
  for (let s = 0; s < nStrip; s++) {
    const start = from + Math.floor((s * (to - from - strip)) / Math.max(1, nStrip - 1));
    const sums = stripSums(frame, axis, seam - reach, 2 * reach, start, strip);
    const coef = clippedFit(design, sums);
    if (coef && coef[0] > 0 && coef[0] + coef[4] > 0) strips.push({ level: coef[0], step: coef[4] / coef[0] });
  }
  // Dark strips, between blocks of fibres, say nothing.
  const lit = medianOf(strips.map(({ level }) => level)) / 4;
  const steps = strips.filter(({ level }) => level >= lit).map(({ step }) => step);
  if (steps.length < FEWEST_STRIPS) return undefined;
  const { mean, sigma, n } = clippedScatter(steps);
  return { value: mean, error: sigma / Math.sqrt(Math.max(1, n - 1)) };
}

/** Mean over the strip's good pixels, pixel by pixel across the seam. A lost pixel would take its ribbon's light with it:
 * its place across the seam is left out (NaN). */
function stripSums(
  frame: SeamFrame,
  axis: "x" | "y",
  first: number,
  n: number,
  start: number,
  strip: number,
): Float64Array {
  const { nx, electrons, mask } = frame;
  return Float64Array.from({ length: n }, (_, i) => {
    let sum = 0;
    for (let k = start; k < start + strip; k++) {
      const at = axis === "x" ? k * nx + first + i : (first + i) * nx + k;
      sum += mask[at] === 0 ? electrons[at] : Number.NaN;
    }
    return sum / strip;
  });
}

/** Terms at each pixel across the seam: 1, t, t², t³, step; n × 5. */
function designOf(reach: number): Float64Array {
  const design = new Float64Array(2 * reach * N_TERM);
  for (let i = 0; i < 2 * reach; i++) {
    const t = (i - reach + 0.5) / reach;
    design.set([1, t, t * t, t * t * t, t > 0 ? 1 : 0], i * N_TERM);
  }
  return design;
}

/** Least squares over the finite sums, once more without those beyond 4 σ; undefined when too few are left. */
function clippedFit(design: Float64Array, sums: Float64Array): Float64Array | undefined {
  let coef = solve(design, sums);
  if (coef === undefined) return undefined;
  for (let turn = 0; turn < 2; turn++) {
    const residuals = sums.map((sum, i) => sum - valueAt(design, coef!, i));
    const reach = 4 * clippedScatter(residuals).sigma;
    const kept = sums.map((sum, i) => (Math.abs(residuals[i]) <= reach ? sum : Number.NaN));
    coef = solve(design, kept);
    if (coef === undefined) return undefined;
  }
  return coef;
}

function valueAt(design: Float64Array, coef: Float64Array, i: number): number {
  let value = 0;
  for (let a = 0; a < N_TERM; a++) value += coef[a] * design[i * N_TERM + a];
  return value;
}

function solve(design: Float64Array, sums: Float64Array): Float64Array | undefined {
  const normal = new Float64Array(N_TERM * N_TERM);
  const right = new Float64Array(N_TERM);
  let n = 0;
  for (let i = 0; i < sums.length; i++) {
    if (!Number.isFinite(sums[i])) continue;
    n++;
    for (let a = 0; a < N_TERM; a++) {
      right[a] += design[i * N_TERM + a] * sums[i];
      for (let b = 0; b < N_TERM; b++) normal[a * N_TERM + b] += design[i * N_TERM + a] * design[i * N_TERM + b];
    }
  }
  if (n < FEWEST_PIXELS) return undefined;
  const inverse = invertPositive(normal, N_TERM);
  return (
    inverse &&
    right.map((_, a) => {
      let sum = 0;
      for (let b = 0; b < N_TERM; b++) sum += inverse[a * N_TERM + b] * right[b];
      return sum;
    })
  );
}
