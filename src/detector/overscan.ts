/** The electronic zero level of each amplifier, from its overscan: a robust smooth curve along the readout direction,
 * since the level drifts while the frame is read, with the variance it brings to every pixel of its line. */
import { sectionSize } from "../fits/sections.js";
import type { Amplifier } from "./amplifiers.js";
import { clippedScatterInPlace, quantileInPlace } from "./clip.js";
import { DetectorError } from "./detectorError.js";
import type { RawImage } from "./raw.js";
import { fitSmoothLevel } from "./smoothLevel.js";

const CLIP_SIGMAS = 5;
/** Jitter of whole lines counts as real beyond this many of its own σ. */
const JITTER_SIGMAS = 5;
/** So many equal pixels in one line of an overscan are no chance. */
const FEWEST_ALIKE = 12;

export interface OverscanLevel {
  /** One for every row (or column) of the data section, ADU. */
  level: Float64Array;
  /** ADU², of the fitted curve. */
  levelVariance: Float64Array;
  /** ADU²: lines jump by more than read noise explains; each line's pixels share its jump. 0 when none is seen. */
  jitterVariance: number;
  /** ADU: scatter of pixels within a line; NaN where it cannot be told. */
  readNoiseAdu: number;
  readNoiseErrorAdu: number;
  /** Overscan pixels used. */
  nPixel: number;
  /** Lines of the data section that have overscan. */
  coveredShare: number;
  /** Intervals of the smooth curve; 0 is a constant. */
  intervals: number;
}

/** The level of an amplifier; undefined when it has no overscan.
 * @throws DetectorError when the overscan holds no finite pixel. */
export function overscanLevel(raw: RawImage, amplifier: Amplifier): OverscanLevel | undefined {
  if (amplifier.overscan.length === 0) return undefined;
  const lines = withoutUnreadLines(overscanLines(raw, amplifier));
  const medians = lineMedians(lines);
  if (medians.every(Number.isNaN)) {
    throw new DetectorError(
      `${raw.name}: the overscan of amplifier ${amplifier.number} holds no value at all; correct its section or give bias_level in the spectrograph file.`,
    );
  }
  const reach = CLIP_SIGMAS * clippedScatterInPlace(offsets(lines, medians)).sigma;
  const kept = keptWithin(lines, medians, reach);
  const means = lineMeans(kept);
  const smooth = fitSmoothLevel(means);
  const noise = noiseWithinLines(kept, means);
  const filled = kept.count.filter((n) => n > 0);
  return {
    level: smooth.level,
    levelVariance: smooth.variance,
    jitterVariance: jitterOf(kept, smooth.sampleSigma, noise.sigma),
    readNoiseAdu: noise.sigma,
    readNoiseErrorAdu: noise.sigma / Math.sqrt(2 * noise.freedom),
    nPixel: filled.reduce((sum, n) => sum + n, 0),
    coveredShare: filled.length / kept.count.length,
    intervals: smooth.intervals,
  };
}

/** Pixels line by line: those of line i are `values` from i · width on, `count[i]` of them. */
interface Lines {
  values: Float64Array;
  width: number;
  count: Int32Array;
}

/** Finite overscan pixels of each line of the data section. */
function overscanLines(raw: RawImage, amplifier: Amplifier): Lines {
  const { data, overscan, levelFor } = amplifier;
  const rows = levelFor === "rows";
  const first = (rows ? data.y1 : data.x1) - 1;
  const n = rows ? sectionSize(data).ny : sectionSize(data).nx;
  const width = overscan.reduce((sum, section) => sum + (rows ? sectionSize(section).nx : sectionSize(section).ny), 0);
  const values = new Float64Array(n * width);
  const count = new Int32Array(n);
  for (const { x1, x2, y1, y2 } of overscan) {
    for (let y = y1 - 1; y < y2; y++) {
      for (let x = x1 - 1; x < x2; x++) {
        const line = (rows ? y : x) - first;
        const value = raw.data[y * raw.nx + x];
        if (line >= 0 && line < n && Number.isFinite(value)) values[line * width + count[line]++] = value;
      }
    }
  }
  return { values, width, count };
}

/** A line whose pixels are all the same was not read out: it has no level and no noise to give. Where most lines are so
 * it is the frame that has no noise. */
function withoutUnreadLines(lines: Lines): Lines {
  const { values, width, count } = lines;
  const read = count.map((n, line) => {
    for (let i = line * width + 1; i < line * width + n; i++) if (values[i] !== values[line * width]) return n;
    return n >= FEWEST_ALIKE ? 0 : n;
  });
  const nUnread = count.reduce((sum, n, line) => sum + (read[line] < n ? 1 : 0), 0);
  return nUnread === 0 || nUnread > 0.9 * count.length ? lines : { values, width, count: read };
}

/** NaN for a line without pixels. */
function lineMedians({ values, width, count }: Lines): Float64Array {
  const line = new Float64Array(width);
  return Float64Array.from(count, (n, k) => {
    for (let i = 0; i < n; i++) line[i] = values[k * width + i];
    return quantileInPlace(line, 0.5, n);
  });
}

/** Of every pixel from its own line's level: neither drift nor jitter of lines widens them. */
function offsets({ values, width, count }: Lines, level: Float64Array): Float64Array {
  const off = new Float64Array(values.length);
  let n = 0;
  for (let line = 0; line < count.length; line++) {
    for (let i = line * width; i < line * width + count[line]; i++) off[n++] = values[i] - level[line];
  }
  return off.subarray(0, n);
}

/** What is kept moves together within its line: `values` are overwritten. */
function keptWithin({ values, width, count }: Lines, medians: Float64Array, reach: number): Lines {
  const kept: Lines = { values, width, count: new Int32Array(count.length) };
  for (let line = 0; line < count.length; line++) {
    for (let i = line * width; i < line * width + count[line]; i++) {
      if (!(Math.abs(values[i] - medians[line]) <= reach)) continue;
      values[line * width + kept.count[line]++] = values[i];
    }
  }
  return kept;
}

/** NaN for a line without pixels. */
function lineMeans({ values, width, count }: Lines): Float64Array {
  return Float64Array.from(count, (n, line) => {
    if (n === 0) return Number.NaN;
    const first = values[line * width];
    let sum = 0;
    for (let i = line * width; i < line * width + n; i++) sum += values[i] - first;
    return first + sum / n;
  });
}

/** Scatter about each line's own mean, so that neither drift nor jitter of lines enters. One wide pixel was clipped
 * already; what is left is plain. */
function noiseWithinLines({ values, width, count }: Lines, means: Float64Array) {
  let sum2 = 0;
  let freedom = 0;
  for (let line = 0; line < count.length; line++) {
    for (let i = line * width; i < line * width + count[line]; i++) sum2 += (values[i] - means[line]) ** 2;
    freedom += Math.max(0, count[line] - 1);
  }
  return { sigma: freedom > 0 ? Math.sqrt(sum2 / freedom) : Number.NaN, freedom };
}

function jitterOf({ count }: Lines, lineSigma: number, pixelSigma: number): number {
  const filled = count.filter((n) => n > 1);
  if (filled.length < 16 || Number.isNaN(pixelSigma)) return 0;
  const expected = filled.reduce((sum, n) => sum + pixelSigma ** 2 / n, 0) / filled.length;
  const excess = lineSigma ** 2 - expected;
  // Second differences of n lines: relative variance of their variance is 2 · 70/36 / n, since neighbours share samples.
  const error = lineSigma ** 2 * Math.sqrt((2 * 70) / 36 / filled.length);
  return excess > JITTER_SIGMAS * error ? excess : 0;
}
