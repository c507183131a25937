/** Read noise and gain, measured.
 *
 * Read noise: scatter within the overscan's lines, or of the difference of two bias frames over √2.
 * Gain, by photon transfer (Janesick, Scientific Charge-Coupled Devices, 2001): of two flats A and B, k the ratio of
 * their levels, the difference D = A − k·B is free of structure and pixel response. Should fibres have moved between
 * the two by a hundredth of a pixel, it is not: so two neighbours along dispersion, where a fibre flat is smooth, are
 * subtracted once more, and what is left is noise,
 *
 *     σ²(D₁ − D₂) = (A₁ + A₂ + k²·(B₁ + B₂)) / gain + 2 · readNoise² · (1 + k²)        ADU², readNoise in ADU
 *
 * The gain is the one that gives (D₁ − D₂) / σ a scatter of 1. */
import type { Spectrograph } from "../spectrograph.js";
import { type Amplifier, amplifierSize, type DetectorLayout, detectorLayout } from "./amplifiers.js";
import { clippedScatter, medianOf } from "./clip.js";
import { DetectorError } from "./detectorError.js";
import { disagreement, disagrees, type Measured } from "./headerDisagreements.js";
import { overscanLevel } from "./overscan.js";
import type { RawImage } from "./raw.js";

/** Pixels with less light than this many times the read noise variance say little about the gain. */
const BRIGHT_TIMES_READ = 20;
const FEWEST_PIXELS = 500;
/** An upper level from which converters and wells are often no longer linear. */
const LINEAR_SHARE = 0.9;

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
}

/** Measures what the frames allow, each amplifier for itself; errors are one σ.
 * @throws DetectorError when no frame is given, or a pair is of different layouts. */
export function measureNoise({ frames = [], bias = [], flats = [] }: NoiseFrames, spectrograph?: Spectrograph) {
  const all = [...frames, ...bias, ...flats];
  if (all.length === 0) throw new DetectorError("no frame was given to measure the noise from; give one or more.");
  const layouts = new Map(all.map((raw) => [raw, detectorLayout(raw, spectrograph, { gainMayBeMissing: true })]));
  const first = layouts.get(all[0])!;
  for (const raw of all) requireSameSections(all[0], first, raw, layouts.get(raw)!);
  const result: NoiseMeasurement = { amplifiers: [], disagreements: [], warnings: [] };
  for (const amplifier of first.amplifiers) {
    const noise = measureAmplifier(amplifier, first, all, bias, flats, result.warnings);
    result.amplifiers.push(noise);
    result.disagreements.push(...disagreementsOf(all[0].name, noise));
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
  warnings: string[],
): AmplifierNoise {
  const noise: AmplifierNoise = {
    amplifier: amplifier.number,
    givenGain: amplifier.gain,
    givenReadNoise: amplifier.readNoise,
  };
  const fromBias = combined(pairs(bias).map(([a, b]) => biasPairNoise(a, b, amplifier)));
  const fromOverscan = combined(all.map((raw) => overscanNoise(raw, amplifier)));
  const readNoiseAdu = fromBias ?? fromOverscan;
  if (readNoiseAdu) {
    noise.readNoiseAdu = readNoiseAdu;
    noise.readNoiseFrom = fromBias ? "bias pairs" : "overscan";
  }
  const read = readNoiseAdu?.value ?? amplifier.readNoise / amplifier.gain;
  const pedestal = pedestalAdu(amplifier, bias);
  if (flats.length > 1 && Number.isNaN(pedestal)) {
    warnings.push(
      `${flats[0].name}: amplifier ${amplifier.number} has no overscan, so its gain cannot be measured without bias frames; give a pair of them.`,
    );
  }
  const known = { readNoiseAdu: Number.isFinite(read) ? read : 0, pedestal };
  const gains = Number.isNaN(pedestal)
    ? []
    : pairs(flats).map(([a, b]) => flatPairGain(a, b, amplifier, layout, known));
  const gain = combined(gains);
  if (gain) noise.gain = gain;
  else if (gains.length > 0) {
    warnings.push(
      `${flats[0].name}: amplifier ${amplifier.number}: too little light, or too few pixels, in the pair of flats to measure its gain.`,
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

function disagreementsOf(name: string, noise: AmplifierNoise): string[] {
  const sentences: string[] = [];
  const { amplifier, givenGain, givenReadNoise, gain, readNoise } = noise;
  if (gain && disagrees(givenGain, gain)) sentences.push(disagreement(name, amplifier, "gain", givenGain, gain));
  if (readNoise && disagrees(givenReadNoise, readNoise)) {
    sentences.push(disagreement(name, amplifier, "read noise", givenReadNoise, readNoise));
  }
  return sentences;
}

/** (1st, 2nd), (3rd, 4th), …; of an odd number the last goes with the first but one only when alone: it is left out. */
function pairs(frames: RawImage[]): [RawImage, RawImage][] {
  const list: [RawImage, RawImage][] = [];
  for (let i = 0; i + 1 < frames.length; i += 2) list.push([frames[i], frames[i + 1]]);
  return list;
}

/** Mean weighted by 1/error²; undefined when there is nothing. */
function combined(values: (Measured | undefined)[]): Measured | undefined {
  let sum = 0;
  let weight = 0;
  for (const entry of values) {
    if (!entry || !(entry.value > 0) || !(entry.error > 0)) continue;
    sum += entry.value / entry.error ** 2;
    weight += 1 / entry.error ** 2;
  }
  return weight > 0 ? { value: sum / weight, error: 1 / Math.sqrt(weight) } : undefined;
}

function overscanNoise(raw: RawImage, amplifier: Amplifier): Measured | undefined {
  const level = overscanLevel(raw, amplifier);
  return level && { value: level.readNoiseAdu, error: level.readNoiseErrorAdu };
}

function biasPairNoise(a: RawImage, b: RawImage, amplifier: Amplifier): Measured | undefined {
  const one = aboveZero(a, amplifier, 0);
  const two = aboveZero(b, amplifier, 0);
  const { sigma, n } = clippedScatter(one.map((value, i) => value - two[i]));
  if (n < FEWEST_PIXELS) return undefined;
  return { value: sigma / Math.SQRT2, error: sigma / Math.SQRT2 / Math.sqrt(2 * n) };
}

function flatPairGain(
  a: RawImage,
  b: RawImage,
  amplifier: Amplifier,
  layout: DetectorLayout,
  { readNoiseAdu, pedestal }: { readNoiseAdu: number; pedestal: number },
): Measured | undefined {
  const ceiling = LINEAR_SHARE * layout.saturationAdu;
  const one = aboveZero(a, amplifier, pedestal, ceiling);
  const two = aboveZero(b, amplifier, pedestal, ceiling);
  const k = levelRatio(one, two);
  const alongX = layout.dispersionAxis === 1;
  const grid: Grid = { ...amplifierSize(amplifier), stepX: alongX ? 1 : 0, stepY: alongX ? 0 : 1 };
  const floor = readNoiseAdu ** 2 * (1 + k * k);
  let gain = Number.isFinite(amplifier.gain) ? amplifier.gain : 1;
  for (let turn = 0; turn < 30; turn++) {
    const pulls = pullsOf(one, two, k, gain, floor, grid);
    if (pulls.length < FEWEST_PIXELS) return undefined;
    const { sigma, n } = clippedScatter(pulls);
    const next = gain / sigma ** 2;
    // The variance of n samples is good to √(2/n), and the gain goes as its inverse. Pixels at the edge of the
    // selection may come and go for ever: a hundredth of the error is close enough.
    const relativeError = Math.sqrt(2 / n);
    const settled =
      Math.abs(next / gain - 1) < 0.01 * relativeError || (turn > 20 && Math.abs(next / gain - 1) < relativeError);
    gain = next;
    if (settled) return { value: gain, error: gain * relativeError };
  }
  return undefined;
}

/** (D₁ − D₂) / σ over disjoint pairs of neighbours along dispersion with enough light. */
function pullsOf(
  one: Float64Array,
  two: Float64Array,
  k: number,
  gain: number,
  floor: number,
  grid: Grid,
): Float64Array {
  const pulls = new Float64Array(one.length >> 1);
  const faintest = BRIGHT_TIMES_READ * Math.max(2 * floor, 1 / gain / gain);
  let n = 0;
  for (let y = 0; y + grid.stepY < grid.ny; y += 1 + grid.stepY) {
    for (let x = 0; x + grid.stepX < grid.nx; x += 1 + grid.stepX) {
      const i = y * grid.nx + x;
      const j = i + grid.stepY * grid.nx + grid.stepX;
      const photons = (one[i] + one[j] + k * k * (two[i] + two[j])) / gain;
      if (!(photons > faintest)) continue;
      pulls[n++] = (one[i] - one[j] - k * (two[i] - two[j])) / Math.sqrt(photons + 2 * floor);
    }
  }
  return pulls.subarray(0, n);
}

/** An amplifier's pixels, and the step to the neighbour along dispersion. */
interface Grid {
  nx: number;
  ny: number;
  stepX: 0 | 1;
  stepY: 0 | 1;
}

/** Ratio of two flats' levels on the brighter half of the pixels. */
function levelRatio(one: Float64Array, two: Float64Array): number {
  const middle = medianOf(two);
  let sumOne = 0;
  let sumTwo = 0;
  for (let i = 0; i < one.length; i++) {
    if (!(two[i] >= middle) || Number.isNaN(one[i])) continue;
    sumOne += one[i];
    sumTwo += two[i];
  }
  return sumTwo > 0 ? sumOne / sumTwo : 1;
}

/** ADU: the zero level of an amplifier without overscan, from bias_level or the bias frames' median; NaN when not known.
 * Where there is overscan it is not used. */
function pedestalAdu(amplifier: Amplifier, bias: RawImage[]): number {
  if (amplifier.overscan.length > 0) return 0;
  if (amplifier.biasLevelAdu !== undefined) return amplifier.biasLevelAdu;
  return bias.length > 0 ? medianOf(aboveZero(bias[0], amplifier, 0)) : Number.NaN;
}

/** ADU over the overscan's level, or over `pedestal` where there is no overscan; NaN above `ceiling`. */
function aboveZero(
  raw: RawImage,
  amplifier: Amplifier,
  pedestal: number,
  ceiling = Number.POSITIVE_INFINITY,
): Float64Array {
  const level = overscanLevel(raw, amplifier);
  const { data, levelFor } = amplifier;
  const { nx, ny } = amplifierSize(amplifier);
  const out = new Float64Array(nx * ny);
  for (let y = 0; y < ny; y++) {
    for (let x = 0; x < nx; x++) {
      const value = raw.data[(data.y1 - 1 + y) * raw.nx + data.x1 - 1 + x];
      const zero = level ? level.level[levelFor === "rows" ? y : x] : pedestal;
      out[y * nx + x] = value <= ceiling ? value - zero : Number.NaN;
    }
  }
  return out;
}
