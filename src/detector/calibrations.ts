/** Calibration images from stacks of frames: bias structure, dark current, pixel response, bad pixels. Bias and dark are
 * smooth images where their pixels show nothing of their own (`quiet.ts`).
 *
 *     bias     B  = mean over frames of gain·(ADU − overscan)
 *     dark     D  = Σ(e − B) / Σ t          e⁻/s
 *     response r  = flat / its large-scale shape, flats normalised to their levels first */
import type { Spectrograph } from "../spectrograph.js";
import type { Assembled, Region } from "./assemble.js";
import { type BadPixelImage, badPixelMask } from "./badpixels.js";
import { medianOf, thinned } from "./clip.js";
import type { Stack } from "./combine.js";
import { DetectorError } from "./detectorError.js";
import { type DetectorGeometry, MaskBit } from "./frame.js";
import type { Frames } from "./frameList.js";
import { requireSameGeometry } from "./geometry.js";
import type { NoiseFrames } from "./noise.js";
import { noiseWarnings } from "./noiseWarnings.js";
import { type Quiet, quietImage } from "./quiet.js";
import { percent } from "./rawSanity.js";
import { type PixelResponse, pixelResponse } from "./response.js";
import { type RoleStack, type RoleTreatment, type StackedFrame, type StackRole, stackRole } from "./roleStack.js";
import { checkRole, MOST_RESPONSE_SCATTER, type Role } from "./roles.js";
import { seamWarnings } from "./seams.js";

export interface DarkCurrent {
  /** ny × nx, e⁻/s, and its variance without the bias stack's share. */
  rate: Float32Array;
  rateVariance: Float32Array;
  /** Frames a second of dark time: how often the bias was taken off for each second, which ties its error to D's. */
  biasPerSecond: number;
  /** ny × nx: 0 where the smooth rate of the amplifier stands in for the pixel's own; no bias error is left in that. */
  own: Uint8Array;
  /** One a region: the rate where a pixel's own does not stand out of its noise, for variances only. */
  typicalRate: number[];
}

export interface CalibrationInput {
  /** "detector": a file of such calibrations (`detectorFile.ts`), made from those behind it. */
  role: "bias" | "dark" | "pixel flat" | "bad pixels" | "detector";
  name: string;
  /** Of the file's HDU; empty for an image that came from no file. */
  checksum: string;
}

/** A role's frames, used or left out, and what the stack of them came to. */
export interface StackReport {
  role: StackRole;
  frames: StackedFrame[];
  /** Median of the stack and of its error, e⁻ per unit of scale: a frame for bias, a second for dark, 1 for pixel flats, which
   * are scaled to their levels. */
  level: number;
  noise: number;
}

/** All images are ny × nx of the turned frame. */
export interface Calibrations {
  /** Of which readout they are; absent when there is none. */
  geometry?: DetectorGeometry;
  /** A frame of that readout, for messages. */
  geometryOf?: string;
  /** e⁻/ADU, one an amplifier: what the frames were read with. */
  gains?: number[];
  bias?: Stack;
  /** ADU, one an amplifier: the bias frames' level above the overscan, or above 0 where there is none. */
  zeroLevelAdu?: number[];
  /** What was asked of the pixel flats; gains take two of them. */
  toldByPixelFlats?: "seams" | "gains and seams";
  dark?: DarkCurrent;
  response?: PixelResponse;
  /** As it was read: image of the assembled frame, not 0 where a pixel is not to be used. */
  badPixels?: BadPixelImage;
  /** What became of every frame, role by role. */
  stacks?: StackReport[];
  /** The frames that went in, in order: for HISTORY. */
  inputs: CalibrationInput[];
  assumptions: string[];
  warnings: string[];
}

/** Raw frames by role. Of a `FrameList` one raw frame is in memory at a time, whatever their number; other iterables are
 * kept whole while their stack is made. */
export interface CalibrationFrames {
  bias?: Frames;
  dark?: Frames;
  pixelFlat?: Frames;
  badPixels?: BadPixelImage;
}

/** More than this share of pixels clipped cannot be cosmic rays. */
const MOST_CLIPPED = 0.02;

/** Nothing given: nothing applied. */
export function noCalibrations(): Calibrations {
  return { inputs: [], assumptions: [], warnings: [] };
}

/** Combines the frames of each role.
 * @throws DetectorError for a frame that cannot play its role, unless the others can do without it, and for frames of
 * different readouts. */
export async function makeCalibrations(frames: CalibrationFrames, spectrograph?: Spectrograph): Promise<Calibrations> {
  const made = noCalibrations();
  const biasFrames = await stackOf("bias", frames.bias, made, spectrograph);
  if (biasFrames) {
    made.bias = stackBias(biasFrames, made);
    made.zeroLevelAdu = zeroLevels(made.bias, biasFrames);
  }
  const darkFrames = await stackOf("dark", frames.dark, made, spectrograph);
  if (darkFrames) made.dark = stackDark(darkFrames, made);
  const flats = await stackOf("pixel flat", frames.pixelFlat, made, spectrograph);
  const pairs: NoiseFrames = { bias: biasFrames?.raws ?? [], flats: flats?.raws ?? [] };
  if (made.zeroLevelAdu) pairs.zeroLevelAdu = made.zeroLevelAdu;
  made.warnings.push(...noiseWarnings(pairs, spectrograph));
  if (flats) {
    made.response = stackFlats(flats, made);
    made.toldByPixelFlats = flats.names.length > 1 ? "gains and seams" : "seams";
  }
  if (frames.badPixels) {
    if (made.geometry) badPixelMask(frames.badPixels, made.geometry); // complains early
    made.badPixels = frames.badPixels;
    made.inputs.push(inputOf(frames.badPixels, "bad pixels"));
  }
  return made;
}

/** ADU, one an amplifier. */
function zeroLevels({ mean }: Stack, { nx, regions }: RoleStack): number[] {
  return regions.map((region) => medianOf(thinned(cutOut(mean, nx, region))) / region.amplifier.gain);
}

async function stackOf(
  role: StackRole,
  frames: Frames | undefined,
  made: Calibrations,
  spectrograph: Spectrograph | undefined,
): Promise<RoleStack | undefined> {
  if (frames === undefined) return undefined;
  const stacked = await stackRole(frames, treatmentOf(role, made), spectrograph);
  if (stacked === undefined) return undefined;
  made.warnings.push(...stacked.warnings);
  made.assumptions.push(...stacked.assumptions);
  made.inputs.push(...stacked.frames.filter(({ used }) => used).map((frame) => inputOf(frame, role)));
  made.gains ??= stacked.regions.map(({ amplifier }) => amplifier.gain);
  const { mean, variance } = stacked.stack;
  const report = { role, frames: stacked.frames, level: medianOf(thinned(mean)) };
  made.stacks = [...(made.stacks ?? []), { ...report, noise: Math.sqrt(medianOf(thinned(variance))) }];
  return stacked;
}
/** What a role's frames are asked and freed of before they are combined. */
function treatmentOf(role: StackRole, made: Calibrations): RoleTreatment {
  return {
    role,
    photons: role !== "bias",
    accept: (raw, frame) => {
      if (made.geometry === undefined) {
        made.geometry = frame.layout.geometry;
        made.geometryOf = raw.name;
      } else requireSameGeometry(made.geometry, made.geometryOf!, frame.layout.geometry, raw.name);
      requireZeroLevel(frame, role, made);
      requireReadNoise(frame);
    },
    // The check looks at the frame before bias structure is off: a few electrons do not matter to it.
    warningsOf: (raw, frame) => [...checkRole(raw, frame, role), ...frame.layout.warnings],
    prepare: (frame, seconds) => {
      if (role !== "bias") subtractBias(frame, made.bias);
      if (role === "pixel flat") subtractDark(frame, made.dark, seconds);
    },
    scaleOf: (frame, seconds) => (role === "bias" ? 1 : role === "dark" ? seconds : levelOf(frame)),
  };
}

function inputOf(raw: { name: string; checksum?: string }, role: CalibrationInput["role"]): CalibrationInput {
  return { role, name: raw.name, checksum: raw.checksum ?? "" };
}

/** @throws DetectorError when nothing tells the zero level of a frame that is not itself a bias. */
export function requireZeroLevel(frame: Assembled, role: Role | undefined, calibrations: Calibrations): void {
  if (role === "bias" || calibrations.bias !== undefined) return;
  const without = frame.regions.find(
    ({ overscan, amplifier }) => overscan === undefined && amplifier.biasLevelAdu === undefined,
  );
  if (without === undefined) return;
  throw new DetectorError(
    `${frame.name}: amplifier ${without.amplifier.number} has no overscan and no bias frame was given, so its zero level is not known; give --bias, an overscan section, or bias_level in the spectrograph file.`,
  );
}

/** @throws DetectorError when a read noise that had to be measured could not be (an overscan of one column, or without
 * noise). */
export function requireReadNoise({ name, regions }: Assembled): void {
  const without = regions.find(({ readVariance }) => !(readVariance > 0));
  if (without === undefined) return;
  throw new DetectorError(
    `${name}: amplifier ${without.amplifier.number}: its read noise is not given and cannot be measured from its overscan; give read_noise (e⁻) in the spectrograph file.`,
  );
}

function stackBias(frames: RoleStack, made: Calibrations): Stack {
  const { nx, ny, regions, stack, halves } = frames;
  warnClipped(frames, "bias", made);
  const quiet = quietImage({ nx, ny, ...stack, regions, halves, shared: regions.map(() => 0) });
  tellQuiet(frames, quiet, "bias", 1, made);
  return stack;
}

function stackDark(frames: RoleStack, made: Calibrations): DarkCurrent {
  const { nx, ny, regions, stack, halves, scales } = frames;
  warnClipped(frames, "dark", made);
  const seconds = scales.reduce((sum, one) => sum + one, 0);
  const biasPerSecond = made.bias ? scales.length / seconds : 0;
  const typicalRate = regions.map((region) => Math.max(0, medianOf(thinned(cutOut(stack.mean, nx, region)))));
  const shared = regions.map((region) =>
    made.bias ? biasPerSecond ** 2 * medianOf(thinned(cutOut(made.bias.variance, nx, region))) : 0,
  );
  const quiet = quietImage({ nx, ny, ...stack, regions, halves, shared });
  tellQuiet(frames, quiet, "dark", seconds / scales.length, made);
  const { own } = quiet;
  const dark: DarkCurrent = { rate: stack.mean, rateVariance: stack.variance, biasPerSecond, own, typicalRate };
  regions.forEach((region, k) => {
    forEachPixel(region, nx, (at) => {
      if (own[at] === 0 || hasOwnRate(dark, at)) return;
      dark.rateVariance[at] += (dark.typicalRate[k] - Math.max(0, dark.rate[at])) / seconds;
    });
  });
  return dark;
}

function tellQuiet(frames: RoleStack, quiet: Quiet, role: "bias" | "dark", scale: number, made: Calibrations) {
  const told = frames.regions.filter((_, k) => quiet.isQuiet[k]).map(({ amplifier }) => amplifier.number);
  if (told.length === 0) return;
  const worst = scale * Math.max(...quiet.patternBelow.filter((_, k) => quiet.isQuiet[k]));
  const called = told.length === 1 ? `amplifier ${told[0]}` : `amplifiers ${told.join(", ")}`;
  made.assumptions.push(
    `${frames.names[0]}: ${called}: the ${role} frames agree on no difference between pixels over ${worst.toFixed(2)} e⁻ rms, so a smooth ${role}, with the pixels that stand out, is taken off instead of each pixel's own noise.`,
  );
}

/** A rate counts as a pixel's own, in variances, from this many of its σ: below it the noise of the rate would make the
 * variance follow the data. */
const OWN_RATE_SIGMAS = 5;

export function hasOwnRate(dark: DarkCurrent, at: number): boolean {
  return dark.rate[at] > OWN_RATE_SIGMAS * Math.sqrt(dark.rateVariance[at]);
}

function forEachPixel({ x0, x1, y0, y1 }: Region, nx: number, visit: (at: number) => void): void {
  for (let y = y0; y < y1; y++) for (let at = y * nx + x0; at < y * nx + x1; at++) visit(at);
}

function stackFlats(frames: RoleStack, made: Calibrations): PixelResponse {
  const { nx, ny, regions, stack, names } = frames;
  warnClipped(frames, "pixel flat", made);
  const whole = { name: names[0], nx, ny, electrons: stack.mean, mask: withoutValue(stack.mean), regions };
  made.warnings.push(...seamWarnings(whole, true));
  const response = pixelResponse(stack, nx, ny, regions);
  const worst = Math.max(...response.scatter);
  if (!(worst < MOST_RESPONSE_SCATTER)) {
    throw new DetectorError(
      `${names.join(", ")}: given as pixel flats, but the pixels scatter by ${percent(worst)} about their large-scale shape where a few per cent are expected; ribbons or lines of light cannot serve, give frames of an evenly lit detector.`,
    );
  }
  return response;
}

function withoutValue(image: Float32Array): Uint8Array {
  const mask = new Uint8Array(image.length);
  for (let at = 0; at < mask.length; at++) if (Number.isNaN(image[at])) mask[at] = MaskBit.missing;
  return mask;
}

function levelOf(frame: Assembled): number {
  return medianOf(thinned(frame.electrons));
}

function subtractBias(frame: Assembled, bias: Stack | undefined): void {
  if (bias === undefined) return;
  for (let i = 0; i < frame.electrons.length; i++) frame.electrons[i] -= bias.mean[i];
}

function subtractDark(frame: Assembled, dark: DarkCurrent | undefined, seconds: number): void {
  if (dark === undefined || !(seconds > 0)) return;
  for (let i = 0; i < frame.electrons.length; i++) frame.electrons[i] -= dark.rate[i] * seconds;
}

function cutOut(image: Float32Array, nx: number, { x0, x1, y0, y1 }: Region): Float32Array {
  const out = new Float32Array((x1 - x0) * (y1 - y0));
  for (let y = y0; y < y1; y++) out.set(image.subarray(y * nx + x0, y * nx + x1), (y - y0) * (x1 - x0));
  return out;
}

function warnClipped({ names, stack }: RoleStack, role: StackRole, made: Calibrations): void {
  stack.clippedShare.forEach((share, i) => {
    if (share <= MOST_CLIPPED) return;
    made.warnings.push(
      `${names[i]}: ${percent(share)} of its pixels disagree with the other ${role} frames by more than read noise and gain explain; the frame, or the gain or read noise in use, is wrong.`,
    );
  });
}
