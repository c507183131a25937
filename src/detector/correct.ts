/** Raw counts to electrons: e = [gain·(ADU − overscan − bias) − dark·t] / r, with the ingredients of its variance.
 *
 *     fixed = (readNoise² + zero level + dark·t + (1 − t·k)²·σ²(bias) + t²·σ²(dark)) / r²        e⁻²
 *
 * where k is how often the bias was taken off for each second of dark time: bias and dark share their bias stack, and
 * its error enters once. Where a smooth dark stands in for the pixel's own, none of it is in the dark: k = 0. */
import type { Spectrograph } from "../spectrograph.js";
import { detectorLayout } from "./amplifiers.js";
import { type Assembled, assemble } from "./assemble.js";
import { markBadPixels } from "./badpixels.js";
import { type Calibrations, type DarkCurrent, hasOwnRate, requireReadNoise, requireZeroLevel } from "./calibrations.js";
import { DetectorError } from "./detectorError.js";
import { darkSeconds, exposureSeconds } from "./exposure.js";
import { type Frame, MaskBit, type NoiseIngredients } from "./frame.js";
import { frameWarnings, refuseOtherAxis } from "./frameSanity.js";
import { requireSameGeometry } from "./geometry.js";
import { carriedHeader, type RawImage } from "./raw.js";
import { refuseImpossible } from "./rawSanity.js";
import { checkRole, type Role } from "./roles.js";

export interface CorrectOptions {
  /** What the frame is to be used as; checked against header and pixels when given. */
  role?: Role;
}

/** Corrects one raw frame.
 * @throws DetectorError in one sentence when the frame is no raw frame, does not match its calibrations or cannot play
 * its role. The raw frame is not changed. */
export function correctFrame(
  raw: RawImage,
  calibrations: Calibrations,
  spectrograph?: Spectrograph,
  options: CorrectOptions = {},
): Frame {
  refuseImpossible(raw, spectrograph);
  const layout = detectorLayout(raw, spectrograph);
  if (calibrations.geometry) {
    requireSameGeometry(calibrations.geometry, calibrations.geometryOf!, layout.geometry, raw.name);
  }
  const frame = assemble(raw, layout, raw.kernels);
  requireZeroLevel(frame, undefined, calibrations);
  requireReadNoise(frame);
  refuseOtherAxis(frame, spectrograph);
  const warnings = [
    ...(raw.warnings ?? []),
    ...layout.warnings,
    ...calibrations.warnings,
    ...otherGains(frame, calibrations),
    ...untold(frameWarnings(frame), calibrations),
  ];
  if (options.role) warnings.push(...checkRole(raw, frame, options.role));
  const seconds = darkTime(raw, calibrations);
  const noise = noiseIngredients(frame, calibrations, seconds);
  applyCalibrations(frame, calibrations, seconds);
  if (calibrations.badPixels) markBadPixels(frame.mask, calibrations.badPixels, layout.geometry);
  return {
    name: raw.name,
    nx: frame.nx,
    ny: frame.ny,
    electrons: frame.electrons,
    mask: frame.mask,
    ...(frame.memory ? { memory: frame.memory } : {}),
    noise,
    geometry: layout.geometry,
    exposureSeconds: exposureSeconds(raw),
    header: carriedHeader(raw),
    assumptions: unique([...layout.assumptions, ...calibrations.assumptions, ...withoutCalibration(raw, calibrations)]),
    warnings: [...new Set(warnings)],
  };
}

/** Without what the bias frames have told better: the read noise of an amplifier. */
function untold(warnings: string[], calibrations: Calibrations): string[] {
  const subject = (sentence: string) => /the read noise of amplifier \d+/.exec(sentence)?.[0];
  const told = calibrations.warnings.map(subject);
  return warnings.filter((sentence) => subject(sentence) === undefined || !told.includes(subject(sentence)));
}

/** Electrons of another gain are electrons all the same, but the structure of a bias is the electronics'. */
function otherGains({ name, regions }: Assembled, { gains, geometryOf }: Calibrations): string[] {
  return regions.flatMap(({ amplifier: { number, gain } }, k) => {
    const theirs = gains?.[k] ?? gain;
    if (!(Math.abs(gain / theirs - 1) > 0.01)) return [];
    return [
      `${name}: amplifier ${number} has a gain of ${gain} e⁻/ADU, but ${theirs} in the calibration frames (${geometryOf}); take those of the frame's own gain, or give the right gain in the spectrograph file.`,
    ];
  });
}

function darkTime(raw: RawImage, { dark }: Calibrations): number {
  if (dark === undefined) return 0;
  const seconds = darkSeconds(raw);
  if (!Number.isNaN(seconds)) return seconds;
  throw new DetectorError(
    `${raw.name}: its header gives no EXPTIME or DARKTIME, which dark frames need; add it to the header or leave the dark frames out.`,
  );
}

function withoutCalibration(raw: RawImage, { bias, dark, response }: Calibrations): string[] {
  const said: string[] = [];
  if (!bias) said.push(`${raw.name}: no bias frames, so bias structure beyond the overscan's level stays in.`);
  if (!dark) said.push(`${raw.name}: no dark frames, so dark current is taken as 0.`);
  if (!response) said.push(`${raw.name}: no pixel flats, so all pixels are taken to respond alike.`);
  return said;
}

/** Subtracts and divides in place; a pixel that a calibration image has no value for loses its own. */
function applyCalibrations(frame: Assembled, { bias, dark, response }: Calibrations, seconds: number): void {
  if (!bias && !dark && !response) return;
  const { electrons, mask } = frame;
  for (let at = 0; at < electrons.length; at++) {
    let value = electrons[at];
    if (bias) value -= bias.mean[at];
    if (dark) value -= dark.rate[at] * seconds;
    if (response) {
      value /= response.response[at];
      if (response.unusable[at]) mask[at] |= MaskBit.bad;
    }
    if (!Number.isFinite(value) && !(mask[at] & MaskBit.missing)) mask[at] |= MaskBit.bad;
    electrons[at] = value;
  }
}

function noiseIngredients(frame: Assembled, calibrations: Calibrations, seconds: number): NoiseIngredients {
  const noise = readNoiseBands(frame);
  const { bias, dark, response } = calibrations;
  if (!bias && !dark && !response) return noise;
  noise.fixedVarianceImage = fixedVarianceImage(frame, calibrations, seconds);
  if (response) {
    noise.inverseResponse = response.response.map((r) => 1 / r);
    noise.responseRelativeVariance = response.relativeVariance;
  }
  return noise;
}

/** Rows that the same amplifiers read share one line of variances. */
function readNoiseBands(frame: Assembled): NoiseIngredients {
  const { nx, ny, regions } = frame;
  const bandOfRow = new Uint8Array(ny);
  const bands: string[] = [];
  for (let y = 0; y < ny; y++) {
    const key = regions.map((region) => (y >= region.y0 && y < region.y1 ? "1" : "0")).join("");
    if (!bands.includes(key)) bands.push(key);
    bandOfRow[y] = bands.indexOf(key);
  }
  const fixedVariance = new Float32Array(bands.length * nx).fill(Number.NaN);
  bands.forEach((key, band) => {
    regions.forEach((region, k) => {
      if (key[k] === "1") fixedVariance.fill(region.readVariance, band * nx + region.x0, band * nx + region.x1);
    });
  });
  return { bandOfRow, fixedVariance };
}

function fixedVarianceImage(frame: Assembled, { bias, dark, response }: Calibrations, seconds: number): Float32Array {
  const { nx, ny, regions } = frame;
  const variance = new Float32Array(nx * ny).fill(Number.NaN);
  const biasShareOfOwn = dark ? (1 - seconds * dark.biasPerSecond) ** 2 : 1;
  regions.forEach((region, k) => {
    for (let y = region.y0; y < region.y1; y++) {
      for (let at = y * nx + region.x0; at < y * nx + region.x1; at++) {
        let v = region.readVariance;
        if (bias) v += (dark?.own[at] ? biasShareOfOwn : 1) * bias.variance[at];
        if (dark) {
          const rate = varianceRate(dark, at, k);
          v += rate * seconds + dark.rateVariance[at] * seconds * seconds;
        }
        variance[at] = response ? v / response.response[at] ** 2 : v;
      }
    }
  });
  return variance;
}

/** e⁻/s: never a rate that follows the noise of the dark frames. */
function varianceRate(dark: DarkCurrent, at: number, region: number): number {
  if (dark.own[at] === 0) return Math.max(0, dark.rate[at]);
  return hasOwnRate(dark, at) ? dark.rate[at] : dark.typicalRate[region];
}

/** One of each, whatever frame it was said of: fifteen calibration frames share their assumptions. */
function unique(sentences: string[]): string[] {
  const seen = new Set<string>();
  return sentences.filter((sentence) => {
    const text = sentence.slice(sentence.indexOf(": ") + 1);
    return !seen.has(text) && seen.add(text);
  });
}
