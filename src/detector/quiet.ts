/** Calibration images without noise of their own: where the pixels of an amplifier show nothing that differs from pixel to
 * pixel, a smooth surface with an offset for each row and column serves in place of the stack, whose noise would else be
 * added to every frame. Pixels that stand out beyond doubt keep their own value.
 *
 * What pixels have of their own is told by the two halves of the frames, whose noise is independent: the mean product of
 * their departures a, b from the smooth image is the variance of the pattern, s² = ⟨a·b⟩, whatever the noise. The same is
 * asked of means over blocks, where a faint pattern that many pixels share shows first. */
import type { Region } from "./assemble.js";
import { clippedScatter, thinned } from "./clip.js";
import type { StackFrame } from "./combine.js";
import { largeScaleLeverage, largeScaleShape } from "./largeScaleShape.js";

/** A pixel departs on its own beyond this many of the stack's σ. */
export const OWN_SIGMAS = 5;
/** A pattern counts when it is beyond this many of its own σ, … */
const SURE_SIGMAS = 4;
/** … and when its variance is more than this share of the stack's: else using the stack would add more than it takes off. */
const LEAST_SHARE = 0.05;
/** The same of block means. A fibre's sum over 5 pixels would get 25 of that variance, and is spared 5 of the stack's. */
const LEAST_BLOCK_SHARE = 0.5;
const BLOCK = 16;
/** Pixels that a scatter is taken of. */
const ENOUGH = 50_000;

export interface QuietInput {
  nx: number;
  ny: number;
  /** ny × nx; changed in place. */
  mean: Float32Array;
  variance: Float32Array;
  regions: Region[];
  /** Means of the even and of the odd frames; absent when there is one frame only. */
  halves: [Float32Array, Float32Array] | undefined;
  /** One a region: variance that the halves share for another reason (the same bias was taken off both). */
  shared: number[];
}

export interface Quiet {
  /** ny × nx: 1 where the pixel's own value stays. */
  own: Uint8Array;
  /** One a region. */
  isQuiet: boolean[];
  /** One a region: the standard deviation of what was left out is below this (2 σ). */
  patternBelow: number[];
}

/** Replaces values and variances by those of the smooth image wherever that is better, region by region. */
export function quietImage(input: QuietInput): Quiet {
  const quiet: Quiet = { own: new Uint8Array(input.nx * input.ny).fill(1), isQuiet: [], patternBelow: [] };
  input.regions.forEach((region, k) => {
    const smooth = smoothImage(input, region);
    const { patternVariance, error, isQuiet } = patternOf(input, region, smooth, input.shared[k]);
    quiet.isQuiet.push(isQuiet);
    quiet.patternBelow.push(Math.sqrt(patternVariance + 2 * error));
    if (!isQuiet) return;
    eachPixel(region, input.nx, (at, x, y) => {
      const value = smooth.at(x, y);
      if (Number.isNaN(input.mean[at]) || standsOut(input, smooth, at, value)) return;
      quiet.own[at] = 0;
      input.mean[at] = value;
      input.variance[at] = patternVariance + smooth.leverage(x, y) * smooth.pixelVariance;
    });
  });
  return quiet;
}

/** Means of the frames with even and odd numbers, scaled alike; frames are added in order, and not kept. A pixel that one of
 * them has no good value for is NaN. */
export class HalfSums {
  private n = 0;
  private readonly sums: [Float32Array, Float32Array];
  private readonly scales: [number, number] = [0, 0];

  constructor(nPixel: number) {
    this.sums = [new Float32Array(nPixel), new Float32Array(nPixel)];
  }

  add({ electrons, mask, scale }: Pick<StackFrame, "electrons" | "mask" | "scale">): void {
    const half = this.n++ % 2;
    const sum = this.sums[half];
    this.scales[half] += scale;
    for (let at = 0; at < sum.length; at++) sum[at] += mask[at] === 0 ? electrons[at] : Number.NaN;
  }

  /** The means, in the sums' place; undefined of a single frame. */
  finish(): [Float32Array, Float32Array] | undefined {
    if (this.n < 2) return undefined;
    this.sums.forEach((sum, half) => {
      const scale = this.scales[half];
      for (let at = 0; at < sum.length; at++) sum[at] /= scale;
    });
    return this.sums;
  }
}

/** The same of frames that are all there. */
export function halvesOf(
  frames: Pick<StackFrame, "electrons" | "mask" | "scale">[],
): [Float32Array, Float32Array] | undefined {
  const halves = new HalfSums(frames[0].electrons.length);
  for (const frame of frames) halves.add(frame);
  return halves.finish();
}

interface Smooth {
  at: (x: number, y: number) => number;
  /** Its variance at a pixel, for pixels of unit variance. */
  leverage: (x: number, y: number) => number;
  /** Robust variance of the stack's pixels about it, and its ratio to the predicted one. */
  pixelVariance: number;
  excess: number;
  nTerm: number;
}

function smoothImage({ mean, variance, nx }: QuietInput, region: Region): Smooth {
  const { x0, x1, y0, y1 } = region;
  const surface = new Float32Array((x1 - x0) * (y1 - y0));
  const shape = largeScaleShape(mean, nx, region);
  for (let y = y0; y < y1; y++) surface.set(shape(y), (y - y0) * (x1 - x0));
  const surfaceAt = (x: number, y: number) => surface[(y - y0) * (x1 - x0) + x - x0];
  const columns = new Float64Array(x1 - x0);
  const rows = new Float64Array(y1 - y0);
  // Rows see what columns have left, and columns, once more, what rows have.
  for (let turn = 0; turn < 2; turn++) {
    addOffsets(
      mean,
      nx,
      region,
      columns,
      (x) => x - x0,
      (x, y) => surfaceAt(x, y) + columns[x - x0] + rows[y - y0],
    );
    addOffsets(
      mean,
      nx,
      region,
      rows,
      (_, y) => y - y0,
      (x, y) => surfaceAt(x, y) + columns[x - x0] + rows[y - y0],
    );
  }
  const at = (x: number, y: number) => surfaceAt(x, y) + columns[x - x0] + rows[y - y0];
  const off = new Float32Array(surface.length);
  const pulls = new Float32Array(surface.length);
  let n = 0;
  eachPixel(region, nx, (i, x, y) => {
    off[n] = mean[i] - at(x, y);
    pulls[n] = off[n] / Math.sqrt(variance[i]);
    n++;
  });
  const leverageOfShape = largeScaleLeverage(region);
  return {
    at,
    leverage: (x, y) => leverageOfShape(x, y) + 1 / columns.length + 1 / rows.length,
    pixelVariance: clippedScatter(thinned(off, ENOUGH)).sigma ** 2,
    excess: clippedScatter(thinned(pulls, ENOUGH)).sigma ** 2,
    nTerm: columns.length + rows.length,
  };
}

/** Adds to each offset the clipped mean of what the model leaves of its pixels. */
function addOffsets(
  mean: Float32Array,
  nx: number,
  region: Region,
  offsets: Float64Array,
  lineOf: (x: number, y: number) => number,
  model: (x: number, y: number) => number,
): void {
  const left = new Float32Array((region.x1 - region.x0) * (region.y1 - region.y0));
  let n = 0;
  eachPixel(region, nx, (at, x, y) => {
    left[n++] = mean[at] - model(x, y);
  });
  const { mean: centre, sigma } = clippedScatter(thinned(left, ENOUGH));
  const sum = new Float64Array(offsets.length);
  const count = new Float64Array(offsets.length);
  n = 0;
  eachPixel(region, nx, (_, x, y) => {
    const value = left[n++];
    // A column may stand out as a whole: clip about where most pixels are only, so that hot pixels stay out.
    if (!(Math.abs(value - centre) <= OWN_SIGMAS * sigma)) return;
    const line = lineOf(x, y);
    sum[line] += value;
    count[line]++;
  });
  for (let line = 0; line < offsets.length; line++) if (count[line] > 0) offsets[line] += sum[line] / count[line];
}

function standsOut({ mean, variance }: QuietInput, { excess }: Smooth, at: number, value: number): boolean {
  return Math.abs(mean[at] - value) > OWN_SIGMAS * Math.sqrt(variance[at] * Math.max(1, excess));
}

/** Products of the halves' departures, pixel by pixel and block by block. */
function patternOf(input: QuietInput, region: Region, smooth: Smooth, shared: number) {
  const { mean, variance, nx, halves } = input;
  const [one, two] = halves ?? [mean, mean];
  const pixels = new Products();
  const nBlockX = Math.ceil((region.x1 - region.x0) / BLOCK);
  const nBlockY = Math.ceil((region.y1 - region.y0) / BLOCK);
  const sums = new Float64Array(3 * nBlockX * nBlockY);
  let predicted = 0;
  eachPixel(region, nx, (at, x, y) => {
    const value = smooth.at(x, y);
    if (standsOut(input, smooth, at, value)) return;
    const a = one[at] - value;
    const b = two[at] - value;
    // A cosmic ray in one half only.
    const reach = 2 * OWN_SIGMAS * Math.sqrt(variance[at] * smooth.excess);
    if (!(Math.abs(a - b) <= 2 * reach)) return;
    pixels.add(a, b);
    predicted += variance[at];
    const block = 3 * (Math.floor((y - region.y0) / BLOCK) * nBlockX + Math.floor((x - region.x0) / BLOCK));
    sums[block] += a;
    sums[block + 1] += b;
    sums[block + 2]++;
  });
  const blocks = new Products();
  for (let k = 0; k < sums.length; k += 3) {
    const n = sums[k + 2];
    if (n > (BLOCK * BLOCK) / 2) blocks.add(sums[k] / n, sums[k + 1] / n);
  }
  // Of a single frame only the predicted noise can be taken off. The smooth image was made from both halves, and so took
  // its own variance out of both.
  const noise = halves ? 0 : predicted / pixels.n;
  const fitted = (smooth.pixelVariance * smooth.nTerm) / pixels.n;
  const inBlock = smooth.pixelVariance / (BLOCK * BLOCK);
  const own = pixels.mean() - noise - shared + fitted;
  const ownInBlocks = blocks.mean() - (halves ? 0 : inBlock) - shared / (BLOCK * BLOCK);
  const isQuiet =
    own <= Math.max(SURE_SIGMAS * pixels.error(), LEAST_SHARE * smooth.pixelVariance) &&
    !(ownInBlocks > Math.max(SURE_SIGMAS * blocks.error(), LEAST_BLOCK_SHARE * inBlock));
  return { patternVariance: Math.max(0, own), error: pixels.error(), isQuiet };
}

/** Mean of a·b and its error when a and b have nothing in common. */
class Products {
  n = 0;
  private ab = 0;
  private aa = 0;
  private bb = 0;

  add(a: number, b: number): void {
    this.n++;
    this.ab += a * b;
    this.aa += a * a;
    this.bb += b * b;
  }

  mean(): number {
    return this.ab / this.n;
  }

  error(): number {
    return Math.sqrt(((this.aa / this.n) * (this.bb / this.n)) / this.n);
  }
}

function eachPixel({ x0, x1, y0, y1 }: Region, nx: number, visit: (at: number, x: number, y: number) => void): void {
  for (let y = y0; y < y1; y++) for (let x = x0; x < x1; x++) visit(y * nx + x, x, y);
}
