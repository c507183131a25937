/** Read noise and gain, measured, each amplifier for itself: read noise from the scatter within the overscan's lines, or
 * of the difference of two bias frames over √2; gain from pairs of flats (`flatPair.ts`). */
import type { Spectrograph } from "../spectrograph.js";
import { amplifierLines, type LineChoice } from "./amplifierLines.js";
import { type Amplifier, type DetectorLayout, detectorLayout } from "./amplifiers.js";
import { clippedScatter, medianOf } from "./clip.js";
import { DetectorError } from "./detectorError.js";
import { FEWEST_PIXELS, flatPairGain } from "./flatPair.js";
import { disagreement, disagrees, type Measured } from "./headerDisagreements.js";
import { overscanLevel } from "./overscan.js";
import type { RawImage } from "./raw.js";

/** An upper level from which converters and wells are often no longer linear. */
const LINEAR_SHARE = 0.9;
const CLIP_SIGMAS = 5;

export interface AmplifierNoise {
  /** Counted from 1. */
  amplifier: number;
  /** As given by header or spectrograph file; NaN when it is not. */
  givenGain: number;
  givenReadNoise: number;
  /** ADU; what was measured, whatever the gain. */
  readNoiseAdu?: Measured;
  /** e⁻, with the measured gain where there is one, else the given one. */
  readNoise?: Measured;
  readNoiseFrom?: "bias pairs" | "overscan";
  /** e⁻/ADU; present when a pair of flats was given. */
  gain?: Measured;
}

export interface NoiseMeasurement {
  amplifiers: AmplifierNoise[];
  /** Sentences where header or file are off by over 10 %. */
  disagreements: string[];
  warnings: string[];
}

export interface NoiseFrames {
  /** Any frames: their overscan gives read noise. */
  frames?: RawImage[];
  /** Two or more: neighbours are paired. */
  bias?: RawImage[];
  /** Two or more of the same light: neighbours are paired. */
  flats?: RawImage[];
  /** ADU, one an amplifier: the level of frames without light, for amplifiers without overscan when no bias is given. */
  zeroLevelAdu?: number[];
}

export interface NoiseOptions {
  /** About so many pixels of each amplifier are looked at, spread evenly over it; all by default. */
  mostPixels?: number;
}

/** Measures what the frames allow; errors are one σ.
 * @throws DetectorError when no frame is given, or a pair is of different layouts. */
export function measureNoise(
  { frames = [], bias = [], flats = [], zeroLevelAdu = [] }: NoiseFrames,
  spectrograph?: Spectrograph,
  { mostPixels = Number.POSITIVE_INFINITY }: NoiseOptions = {},
): NoiseMeasurement {
  const all = [...frames, ...bias, ...flats];
  if (all.length === 0) throw new DetectorError("no frame was given to measure the noise from; give one or more.");
  const layouts = new Map(all.map((raw) => [raw, detectorLayout(raw, spectrograph, { gainMayBeMissing: true })]));
  const first = layouts.get(all[0])!;
  for (const raw of all) requireSameSections(all[0], first, raw, layouts.get(raw)!);
  const result: NoiseMeasurement = { amplifiers: [], disagreements: [], warnings: [] };
  for (const [i, amplifier] of first.amplifiers.entries()) {
    if (amplifier.biasLevelAdu === undefined && zeroLevelAdu[i] !== undefined) amplifier.biasLevelAdu = zeroLevelAdu[i];
    const noise = measureAmplifier(amplifier, first, all, bias, flats, mostPixels, result.warnings);
    result.amplifiers.push(noise);
    result.disagreements.push(...noiseDisagreements({ frames, bias, flats }, noise));
  }
  return result;
}

function requireSameSections(a: RawImage, layoutA: DetectorLayout, b: RawImage, layoutB: DetectorLayout): void {
  if (layoutA.geometry.digest === layoutB.geometry.digest) return;
  throw new DetectorError(
    `${a.name} and ${b.name} have different sections or sizes; noise is measured between frames of one readout.`,
  );
}

function measureAmplifier(
  amplifier: Amplifier,
  layout: DetectorLayout,
  all: RawImage[],
  bias: RawImage[],
  flats: RawImage[],
  mostPixels: number,
  warnings: string[],
): AmplifierNoise {
  const noise: AmplifierNoise = {
    amplifier: amplifier.number,
    givenGain: amplifier.gain,
    givenReadNoise: amplifier.readNoise,
  };
  const choice: LineChoice = { axis: layout.dispersionAxis, mostPixels };
  const fromBias = combined(pairs(bias).map(([a, b]) => biasPairNoise(a, b, amplifier, mostPixels)));
  const fromOverscan = combined(all.map((raw) => overscanNoise(raw, amplifier)));
  const readNoiseAdu = fromBias ?? fromOverscan;
  if (readNoiseAdu) {
    noise.readNoiseAdu = readNoiseAdu;
    noise.readNoiseFrom = fromBias ? "bias pairs" : "overscan";
  }
  const pedestal = pedestalAdu(amplifier, bias, choice);
  if (flats.length > 1 && Number.isNaN(pedestal)) {
    warnings.push(
      `${flats[0].name}: amplifier ${amplifier.number} has no overscan, so its gain cannot be measured without bias frames; give a pair of them.`,
    );
  }
  const start = {
    readNoise: readNoiseAdu ?? { value: amplifier.readNoise / amplifier.gain, error: 0 },
    gain: amplifier.gain,
  };
  const ceiling = LINEAR_SHARE * layout.saturationAdu;
  const lines = (raw: RawImage) => amplifierLines(raw, amplifier, { ...choice, pedestal, ceiling });
  const gains = Number.isNaN(pedestal) ? [] : pairs(flats).map(([a, b]) => flatPairGain(lines(a), lines(b), start));
  const gain = combined(gains);
  if (gain) noise.gain = gain;
  else if (gains.length > 0) {
    warnings.push(
      `${flats[0].name}: amplifier ${amplifier.number}: too little light, or not the same light, in the pair of flats to measure its gain.`,
    );
  }
  const used = gain ?? { value: amplifier.gain, error: 0 };
  if (readNoiseAdu && Number.isFinite(used.value)) {
    const value = used.value * readNoiseAdu.value;
    const relative2 = (readNoiseAdu.error / readNoiseAdu.value) ** 2 + (used.error / used.value) ** 2;
    noise.readNoise = { value, error: value * Math.sqrt(relative2) };
  }
  return noise;
}

/** Sentences for an amplifier whose gain or read noise is off by over 10 %. Error bars of bright light go as √gain over
 * the light's e⁻, those of faint light as the read noise over the scatter in e⁻ of the given gain.
 * @param withReadNoise whether the read noise is told too. */
export function noiseDisagreements(
  { frames = [], bias = [], flats = [] }: NoiseFrames,
  { amplifier, givenGain, givenReadNoise, gain, readNoise, readNoiseAdu }: AmplifierNoise,
  withReadNoise = true,
): string[] {
  const sentences: string[] = [];
  if (gain && disagrees(givenGain, gain)) {
    const tooLarge = Math.sqrt(gain.value / givenGain);
    sentences.push(disagreement(flats[0].name, amplifier, "gain", givenGain, gain, tooLarge));
  }
  if (withReadNoise && readNoise && readNoiseAdu && disagrees(givenReadNoise, readNoise)) {
    const { name } = [...bias, ...frames, ...flats][0];
    const scatter = Number.isNaN(givenGain) ? readNoise.value : readNoiseAdu.value * givenGain;
    const tooLarge = givenReadNoise / scatter;
    sentences.push(disagreement(name, amplifier, "read noise", givenReadNoise, readNoise, tooLarge));
  }
  return sentences;
}

/** (1st, 2nd), (3rd, 4th), …; of an odd number the last goes with the first but one only when alone: it is left out. */
function pairs(frames: RawImage[]): [RawImage, RawImage][] {
  const list: [RawImage, RawImage][] = [];
  for (let i = 0; i + 1 < frames.length; i += 2) list.push([frames[i], frames[i + 1]]);
  return list;
}

/** Mean of values whose errors grow in proportion to them: weighted by their relative errors, since 1/error² would prefer
 * those that came out low. Undefined when there is nothing. */
function combined(values: (Measured | undefined)[]): Measured | undefined {
  let sum = 0;
  let weight = 0;
  for (const entry of values) {
    if (!entry || !(entry.value > 0) || !(entry.error > 0)) continue;
    const own = (entry.value / entry.error) ** 2;
    sum += own * entry.value;
    weight += own;
  }
  return weight > 0 ? { value: sum / weight, error: sum / weight / Math.sqrt(weight) } : undefined;
}

function overscanNoise(raw: RawImage, amplifier: Amplifier): Measured | undefined {
  const level = overscanLevel(raw, amplifier);
  return level && { value: level.readNoiseAdu, error: level.readNoiseErrorAdu };
}

/** Each line of the difference loses its own mean: the overscan's level has an error that all pixels of a line share. */
function biasPairNoise(a: RawImage, b: RawImage, amplifier: Amplifier, mostPixels: number): Measured | undefined {
  const choice: LineChoice = { axis: amplifier.levelFor === "rows" ? 1 : 2, mostPixels };
  const { values: one, nLine, length } = amplifierLines(a, amplifier, choice);
  const { values: two } = amplifierLines(b, amplifier, choice);
  const difference = one.map((value, i) => value - two[i]);
  const wide = clippedScatter(difference);
  const reach = CLIP_SIGMAS * wide.sigma;
  for (let line = 0; line < nLine; line++) {
    const own = difference.subarray(line * length, (line + 1) * length);
    let sum = 0;
    let n = 0;
    for (const value of own) {
      if (!(Math.abs(value - wide.mean) <= reach)) continue;
      sum += value;
      n++;
    }
    const stretch = n > 1 ? Math.sqrt(n / (n - 1)) : Number.NaN;
    for (let i = 0; i < length; i++) own[i] = (own[i] - sum / n) * stretch;
  }
  const { sigma, n } = clippedScatter(difference);
  if (n < FEWEST_PIXELS) return undefined;
  return { value: sigma / Math.SQRT2, error: sigma / Math.SQRT2 / Math.sqrt(2 * n) };
}

/** ADU: the zero level of an amplifier without overscan, from bias_level or the bias frames' median; NaN when not known.
 * Where there is overscan it is not used. */
function pedestalAdu(amplifier: Amplifier, bias: RawImage[], choice: LineChoice): number {
  if (amplifier.overscan.length > 0) return 0;
  if (amplifier.biasLevelAdu !== undefined) return amplifier.biasLevelAdu;
  return bias.length > 0 ? medianOf(amplifierLines(bias[0], amplifier, choice).values) : Number.NaN;
}
