/** Which frames of a role are unlike the others: in the gain they were read with, in level, in structure, in noise.
 *
 * Each frame leaves some of its pixels behind, pairs of neighbours spread over the cells of a grid, so that any number of
 * frames can be compared afterwards. Level and structure are told by the cells' medians of what a pixel is above the median of
 * all frames, noise by what the pairs' differences D leave beside the mean of the other frames', so that no pattern that the
 * frames share matters:
 *
 *     r_i = var(D_i − mean of D_j, j ≠ i) = V_i + Σ_{j≠i} V_j/(n−1)²,   solved for the V_i
 *
 * (for three frames that is the three-cornered hat of Gray & Allan 1974). What is tolerated is what does a stack no harm, not
 * what noise explains: nights drift. */
import type { Assembled, Region } from "./assemble.js";
import { clippedScatter, medianOf, quantileOfSorted, sortedFinite } from "./clip.js";
import type { StackRole } from "./roleStack.js";

/** Cells along each axis of an amplifier's region, at most, and the pairs of pixels of a cell that are looked at. */
const MOST_CELLS = 16;
const LEAST_CELL = 8;
const PAIRS = 32;
const PIXELS = 2 * PAIRS;
/** A median's standard error over that of a mean, √(π/2). */
const MEDIAN_ERROR = 1.2533141373155001;

/** In shares of a pixel's noise: what a frame's level may be off by, with an overscan and where the pedestal wanders. */
const LEVEL_SIGMAS = 1;
const PEDESTAL_SIGMAS = 3;
/** The same of structure, … */
const STRUCTURE_SIGMAS = 0.5;
/** … found in this share of the cells at least, … */
const CELLS_THAT_TELL = 0.05;
/** … (beyond so many standard errors of a cell's median) … */
const CELL_SIGMAS = 3;
/** … and what level and structure may be off by as a share of the level: dark current follows the temperature, shutters
 * and lamps light flats unevenly. */
const LEVEL_SHARE: Record<StackRole, number> = { bias: 0, dark: 0.2, "pixel flat": Number.POSITIVE_INFINITY };
const STRUCTURE_SHARE: Record<StackRole, number> = { bias: 0, dark: 0.2, "pixel flat": 0.1 };
/** Variances may differ by this factor, gains by this share. */
const VARIANCE_RATIO = 1.5;
const GAIN_SHARE = 0.01;

export interface Likeness {
  scale: number;
  /** e⁻/ADU, one an amplifier. */
  gains: number[];
  hasOverscan: boolean;
  /** e⁻, [cells × 64]: pairs of neighbours; NaN where a pixel is no good. */
  pixels: Float32Array;
  /** e⁻; median, and scatter of one pixel (fixed pattern from pixel to pixel included). */
  level: number;
  noise: number;
  /** e⁻; a pixel's noise as the largest read noise and, with photons, the level predict it. */
  predictedNoise: number;
}

/** @param scale as in a stack: how much of what the frames share is in this one. */
export function likenessOf(frame: Assembled, scale: number, photons: boolean): Likeness {
  const pixels: number[] = [];
  for (const region of frame.regions) addPixels(frame, region, pixels);
  const level = medianOf(pixels);
  const readVariance = Math.max(...frame.regions.map((region) => region.readVariance));
  return {
    scale,
    gains: frame.regions.map(({ amplifier }) => amplifier.gain),
    hasOverscan: frame.regions.every(({ overscan }) => overscan !== undefined),
    pixels: Float32Array.from(pixels),
    level,
    noise: clippedScatter(differencesOf(pixels)).sigma / Math.SQRT2,
    predictedNoise: Math.sqrt(readVariance + (photons ? Math.max(level, 0) : 0)),
  };
}

function addPixels({ electrons, mask, nx }: Assembled, region: Region, pixels: number[]): void {
  const [nCellX, nCellY] = [cellsAlong(region.x1 - region.x0), cellsAlong(region.y1 - region.y0)];
  const edge = (from: number, to: number, i: number, n: number) => from + Math.floor(((to - from) * i) / n);
  const good = (at: number) => (mask[at] === 0 ? electrons[at] : Number.NaN);
  for (let j = 0; j < nCellY; j++) {
    const [y0, y1] = [edge(region.y0, region.y1, j, nCellY), edge(region.y0, region.y1, j + 1, nCellY)];
    for (let i = 0; i < nCellX; i++) {
      const [x0, x1] = [edge(region.x0, region.x1, i, nCellX), edge(region.x0, region.x1, i + 1, nCellX)];
      const nAcross = Math.max(1, x1 - x0 - 1);
      for (let k = 0; k < PAIRS; k++) {
        const place = Math.floor(((k + 0.5) * nAcross * (y1 - y0)) / PAIRS);
        const at = (y0 + Math.floor(place / nAcross)) * nx + x0 + (place % nAcross);
        pixels.push(good(at), good(x1 - x0 > 1 ? at + 1 : at));
      }
    }
  }
}

function differencesOf(pixels: ArrayLike<number>): Float64Array {
  return Float64Array.from({ length: pixels.length >> 1 }, (_, p) => pixels[2 * p + 1] - pixels[2 * p]);
}

function cellsAlong(size: number): number {
  return Math.max(1, Math.min(MOST_CELLS, Math.floor(size / LEAST_CELL)));
}

/** Of each frame what is unlike the others, in words that follow its name; undefined where nothing is. Of fewer than three
 * frames nobody can tell. */
export function unlikeness(frames: Likeness[], role: StackRole): (string | undefined)[] {
  const reasons: (string | undefined)[] = frames.map(() => undefined);
  for (const look of [otherGains, otherLight, otherNoise]) {
    const left = Array.from(frames.keys()).filter((i) => reasons[i] === undefined);
    if (left.length < 3) break;
    const found = look(
      left.map((i) => frames[i]),
      role,
    );
    left.forEach((i, k) => {
      reasons[i] = found[k];
    });
  }
  return reasons;
}

function otherGains(frames: Likeness[], role: StackRole): (string | undefined)[] {
  const common = frames[0].gains.map((_, k) => medianOf(frames.map(({ gains }) => gains[k])));
  return frames.map(({ gains }) => {
    const k = gains.findIndex((gain, i) => Math.abs(gain / common[i] - 1) > GAIN_SHARE);
    if (k < 0) return undefined;
    return `was read with a gain of ${text(gains[k])} e⁻/ADU, the other ${role} frames with ${text(common[k])}`;
  });
}

function otherLight(frames: Likeness[], role: StackRole): (string | undefined)[] {
  const n = frames.length;
  const shared = Array.from(frames[0].pixels, (_, p) => medianOf(frames.map(({ pixels, scale }) => pixels[p] / scale)));
  const typical = medianOf(shared);
  // Variance of that median, for frames of one noise.
  const sharedVariance = (MEDIAN_ERROR ** 2 / n) * medianOf(frames.map((one) => (one.predictedNoise / one.scale) ** 2));
  return frames.map(({ pixels, scale, level, predictedNoise, hasOverscan }) => {
    const off = Float64Array.from({ length: pixels.length / PIXELS }, (_, c) => cellAbove(pixels, scale, shared, c));
    const expected = scale * typical;
    const offLevel = medianOf(off);
    const sigmas = hasOverscan ? LEVEL_SIGMAS : PEDESTAL_SIGMAS;
    if (Math.abs(offLevel) > Math.max(sigmas * predictedNoise, LEVEL_SHARE[role] * Math.abs(expected))) {
      return `has a level of ${text(level)} e⁻ where the other ${role} frames let expect ${text(level - offLevel)} e⁻`;
    }
    const sorted = sortedFinite(off.map((value) => Math.abs(value - offLevel)));
    const reached = quantileOfSorted(sorted, 1 - CELLS_THAT_TELL);
    const cellError = (MEDIAN_ERROR / Math.sqrt(PIXELS)) * Math.sqrt(predictedNoise ** 2 + scale ** 2 * sharedVariance);
    const share = STRUCTURE_SHARE[role] * Math.abs(expected);
    if (reached > Math.max(STRUCTURE_SIGMAS * predictedNoise, CELL_SIGMAS * cellError, share)) {
      return `has another structure than the other ${role} frames: a twentieth of its area is off by over ${text(reached)} e⁻`;
    }
    return undefined;
  });
}

/** Median of what the pixels of cell `c` hold beyond `scale` times what the frames share. */
function cellAbove(pixels: Float32Array, scale: number, shared: number[], c: number): number {
  return medianOf(
    pixels.subarray(c * PIXELS, (c + 1) * PIXELS).map((value, p) => value - scale * shared[c * PIXELS + p]),
  );
}

function otherNoise(frames: Likeness[], role: StackRole): (string | undefined)[] {
  const excess = noiseExcess(frames);
  const common = medianOf(excess);
  return excess.map((own) => {
    const ratio = own / common;
    if (!(ratio > VARIANCE_RATIO || ratio < 1 / VARIANCE_RATIO)) return undefined;
    return `has ${text(Math.sqrt(Math.max(ratio, 0)))} times the noise of the other ${role} frames, as with another gain or with pickup`;
  });
}

/** Of each frame the variance of its pixels over the predicted one. */
function noiseExcess(frames: Likeness[]): number[] {
  const n = frames.length;
  const scaled = frames.map(({ pixels, scale }) => differencesOf(pixels).map((value) => value / scale));
  const sum = new Float64Array(scaled[0].length);
  for (const one of scaled) for (let p = 0; p < sum.length; p++) sum[p] += one[p];
  const left = scaled.map(
    (one) => clippedScatter(one.map((value, p) => value - (sum[p] - value) / (n - 1))).sigma ** 2,
  );
  const w = 1 / (n - 1) ** 2;
  const total = left.reduce((all, one) => all + one, 0) / (1 - w + n * w);
  return frames.map(({ scale, predictedNoise }, i) => {
    const own = (left[i] - w * total) / (1 - w);
    return (own * scale * scale) / (2 * predictedNoise ** 2);
  });
}

function text(value: number): string {
  return String(Number(value.toPrecision(3)));
}
