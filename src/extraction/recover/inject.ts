/** Known light on top of a frame: the flat's pixels, every column scaled by one number, with the noise that so little light has.
 *
 *     added(x, y) = c · F + l(x) · (F − level of the gaps) + noise
 *
 * c: the continuum. l: unresolved emission lines, sharp along x; the smooth light in the flat's gaps stays out of them, since
 * scattered light has no lines. The flat's own noise comes along scaled: p² of its variance, p = c + l(x). A flux of p·F has the
 * variance p·F, so Poisson noise of the variance p·F·(1 − p·q/n) is drawn on top (q: what moving the pixels left of their noise,
 * n: flats in the mean), in counted electrons, before the pixel's response.
 *
 * The draws use Math.exp and Math.log: the same bits on one engine, not promised across engines. */
import type { Frame } from "../../detector/frame.js";
import { poisson } from "../../random/poisson.js";
import { openStream } from "../../random/streams.js";
import { gaussianWeights } from "../../reference/profile.js";
import { levelAt, type ZonePlan, zonesAt } from "./zones.js";

/** σ of a line's image along x for a FWHM of 2.2 px. */
const lineSigma = 2.2 / 2.354820045;
/** Columns that a line's light reaches on each side. */
export const lineReach = 5;
const firstLine = 23;
const lineStep = 47;
/** Of the flat: neither continuum nor line may need more, or its noise would exceed that of the light. */
const mostContinuum = 0.5;
const mostLight = 0.95;
/** Peak of a line over the continuum, where the flat has that much. */
const lineContrast = 20;

/** The flat as it lies on the science frame. */
export interface MovedLight {
  /** ny × nx, e⁻. */
  pixels: Float32Array;
  /** ny × nx: q; null for 1 throughout. */
  noiseLeft: Float32Array | null;
  /** Flats in the mean of each pixel: ny × nx. */
  nUsed: Uint8Array;
  /** nGap × nx, e⁻ per pixel. */
  level: Float64Array;
}

export interface Pattern {
  /** e⁻ per column: the decade that the continuum is meant for. */
  from: number;
  to: number;
  /** c. */
  continuum: number;
  /** nx: l(x). */
  line: Float64Array;
  /** Columns of the lines' peaks. */
  peaks: number[];
}

/** Patterns for the decades 10 … 1e5 e⁻ per column that a flat of `typical` e⁻ per column allows. */
export function makePatterns(typical: number, nx: number): { patterns: Pattern[]; left: string[] } {
  const patterns: Pattern[] = [];
  const left: string[] = [];
  for (const from of [10, 100, 1000, 10_000]) {
    const to = 10 * from;
    const continuum = Math.min(Math.sqrt(from * to) / typical, mostContinuum);
    // The flat's fibres differ in throughput by tens of per cent.
    if (continuum * typical < 1.3 * from) {
      left.push(
        `Nothing is injected at ${from} to ${to} e⁻ per column: the flat holds ${Math.round(typical)} e⁻ per column, of which at most half is used; a longer flat, or more of them, would reach it.`,
      );
      continue;
    }
    patterns.push({ from, to, continuum, ...makeLines(continuum, nx, from) });
  }
  return { patterns, left };
}

/** Lines at other places, and elsewhere within a pixel, in each pattern. */
function makeLines(continuum: number, nx: number, from: number): { line: Float64Array; peaks: number[] } {
  const line = new Float64Array(nx);
  const peaks: number[] = [];
  const peak = Math.min(lineContrast * continuum, mostLight - continuum);
  const offset = [10, 100, 1000, 10_000].indexOf(from) * 11;
  for (let i = 0, x = firstLine + offset; x < nx - lineReach; i++, x += lineStep) {
    const within = ((i * 0.618) % 1) - 0.5;
    const first = x - lineReach;
    const image = gaussianWeights(x + within, lineSigma, first, 2 * lineReach + 1);
    const highest = Math.max(...image);
    image.forEach((weight, j) => {
      line[first + j] += (peak * weight) / highest;
    });
    peaks.push(x);
  }
  return { line, peaks };
}

/** `frame` with the pattern's light on it; neither is changed. */
export function injectLight(frame: Frame, light: MovedLight, pattern: Pattern, zones: ZonePlan, seed: number): Frame {
  const { nx, ny, noise } = frame;
  const electrons = frame.electrons.slice();
  const stream = openStream(seed, "recovery", pattern.from);
  for (let x = 0; x < nx; x++) {
    const [c, l] = [pattern.continuum, pattern.line[x]];
    const column = zonesAt(zones, x);
    const levels = zones.gaps.map((_, g) => light.level[g * nx + x]);
    for (let y = 0; y < ny; y++) {
      const at = y * nx + x;
      const flat = light.pixels[at];
      const smooth = l > 0 ? levelAt(y, column, levels) : 0;
      const added = (c + l) * flat - l * smooth;
      const kept = ((c + l) * (light.noiseLeft?.[at] ?? 1)) / Math.max(light.nUsed[at], 1);
      const gain = noise.inverseResponse?.[at] ?? 1;
      const mean = (Math.max(added, 0) * Math.max(1 - kept, 0)) / gain;
      electrons[at] += added + gain * (poisson(stream, mean) - mean);
    }
  }
  return { ...frame, electrons };
}
