/** The electronic zero level of each amplifier, from its overscan: a robust smooth curve along the readout direction,
 * since the level drifts while the frame is read, with the variance it brings to every pixel of its line. */
import { sectionSize } from "../fits/sections.js";
import type { Amplifier } from "./amplifiers.js";
import { clippedScatter, medianOf } from "./clip.js";
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
  const medians = Float64Array.from(lines, medianOf);
  const rough = fitSmoothLevel(medians);
  if (Number.isNaN(rough.level[0])) {
    throw new DetectorError(
      `${raw.name}: the overscan of amplifier ${amplifier.number} holds no value at all; correct its section or give bias_level in the spectrograph file.`,
    );
  }
  const reach = CLIP_SIGMAS * clippedScatter(offsets(lines, rough.level)).sigma;
  const kept = lines.map((line, i) => line.filter((value) => Math.abs(value - medians[i]) <= reach));
  const means = Float64Array.from(kept, meanOf);
  const smooth = fitSmoothLevel(means);
  const noise = noiseWithinLines(kept, means);
  return {
    level: smooth.level,
    levelVariance: smooth.variance,
    jitterVariance: jitterOf(kept, smooth.sampleSigma, noise.sigma),
    readNoiseAdu: noise.sigma,
    readNoiseErrorAdu: noise.sigma / Math.sqrt(2 * noise.freedom),
    nPixel: kept.reduce((sum, line) => sum + line.length, 0),
    coveredShare: kept.filter((line) => line.length > 0).length / kept.length,
    intervals: smooth.intervals,
  };
}

/** Finite overscan pixels of each line of the data section. */
function overscanLines(raw: RawImage, amplifier: Amplifier): number[][] {
  const { data, overscan, levelFor } = amplifier;
  const rows = levelFor === "rows";
  const first = (rows ? data.y1 : data.x1) - 1;
  const n = rows ? sectionSize(data).ny : sectionSize(data).nx;
  const lines: number[][] = Array.from({ length: n }, () => []);
  for (const { x1, x2, y1, y2 } of overscan) {
    for (let y = y1 - 1; y < y2; y++) {
      for (let x = x1 - 1; x < x2; x++) {
        const line = lines[(rows ? y : x) - first];
        const value = raw.data[y * raw.nx + x];
        if (line !== undefined && Number.isFinite(value)) line.push(value);
      }
    }
  }
  return lines;
}

/** A line whose pixels are all the same was not read out: it has no level and no noise to give. Where most lines are so
 * it is the frame that has no noise. */
function withoutUnreadLines(lines: number[][]): number[][] {
  const unread = (line: number[]) => line.length >= FEWEST_ALIKE && line.every((value) => value === line[0]);
  const nUnread = lines.filter(unread).length;
  if (nUnread === 0 || nUnread > 0.9 * lines.length) return lines;
  return lines.map((line) => (unread(line) ? [] : line));
}

function offsets(lines: number[][], level: Float64Array): number[] {
  return lines.flatMap((line, i) => line.map((value) => value - level[i]));
}

function meanOf(values: number[]): number {
  let sum = 0;
  for (const value of values) sum += value - values[0];
  return values.length > 0 ? values[0] + sum / values.length : Number.NaN;
}

/** Scatter about each line's own mean, so that neither drift nor jitter of lines enters. One wide pixel was clipped
 * already; what is left is plain. */
function noiseWithinLines(lines: number[][], means: Float64Array) {
  let sum2 = 0;
  let freedom = 0;
  lines.forEach((line, i) => {
    for (const value of line) sum2 += (value - means[i]) ** 2;
    freedom += Math.max(0, line.length - 1);
  });
  return { sigma: freedom > 0 ? Math.sqrt(sum2 / freedom) : Number.NaN, freedom };
}

function jitterOf(lines: number[][], lineSigma: number, pixelSigma: number): number {
  const filled = lines.filter((line) => line.length > 1);
  if (filled.length < 16 || Number.isNaN(pixelSigma)) return 0;
  const expected = filled.reduce((sum, line) => sum + pixelSigma ** 2 / line.length, 0) / filled.length;
  const excess = lineSigma ** 2 - expected;
  // Second differences of n lines: relative variance of their variance is 2 · 70/36 / n, since neighbours share samples.
  const error = lineSigma ** 2 * Math.sqrt((2 * 70) / 36 / filled.length);
  return excess > JITTER_SIGMAS * error ? excess : 0;
}
