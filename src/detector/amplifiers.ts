/** The detector's layout: where each amplifier's pixels and overscan lie in the file and in the assembled frame, and
 * what turns its counts into electrons. Taken from the header in the forms common practice has, or from the
 * spectrograph file, which wins. */
import { formatSection, type Section, sectionSize } from "../fits/sections.js";
import type { Spectrograph } from "../spectrograph.js";
import { type AmplifierKeys, amplifierKeys } from "./amplifierKeys.js";
import { DetectorError } from "./detectorError.js";
import type { DetectorGeometry } from "./frame.js";
import { geometryDigest } from "./geometry.js";
import { numberOf, type RawImage, textOf } from "./raw.js";
import { overscanOf, placesOf, readSection, refuseOverlaps } from "./sections.js";

export interface Amplifier {
  /** Counted from 1, in the order of the file. */
  number: number;
  /** e⁻/ADU; NaN when not known (only where that is allowed). */
  gain: number;
  /** e⁻; NaN: to be measured from the overscan. */
  readNoise: number;
  /** Sections of the file. */
  data: Section;
  /** Without the skipped columns; empty when there is none. */
  overscan: Section[];
  /** Overscan beside the data gives a level for every row, overscan above or below it one for every column. */
  levelFor: "rows" | "columns";
  overscanSkip: number;
  /** In the assembled frame, which starts at [1, 1]. */
  place: Section;
  /** ADU: taken off where there is no overscan. */
  biasLevelAdu?: number;
}

export interface DetectorLayout {
  /** Size of the image in the file. */
  nx: number;
  ny: number;
  amplifiers: Amplifier[];
  dispersionAxis: 1 | 2;
  /** ADU; Infinity when not known. */
  saturationAdu: number;
  geometry: DetectorGeometry;
  assumptions: string[];
  warnings: string[];
}

export interface LayoutOptions {
  /** Report a gain that is missing or impossible as a warning, with NaN for its value: for a look at the frame only. */
  gainMayBeMissing?: boolean;
}

/** Layout of a raw frame.
 * @throws DetectorError: one sentence for each gain that is missing, not finite or not over 0 (every error bar hangs
 * on it), sections that overlap, leave the frame or do not fit their place, a read noise that is neither given nor
 * measurable. */
export function detectorLayout(
  raw: RawImage,
  spectrograph?: Spectrograph,
  options: LayoutOptions = {},
): DetectorLayout {
  const assumptions: string[] = [];
  const warnings: string[] = [];
  const keys = amplifierKeys(raw, spectrograph, assumptions);
  const binning = binningOf(raw);
  const data = keys.map((entry) => dataSection(raw, entry, keys.length, assumptions));
  const { places, original, axis1, axis2 } = placesOf(raw, keys, data, binning, assumptions);
  const amplifiers = keys.map((entry, i) => {
    const overscan = overscanOf(raw, entry, data[i], assumptions);
    const amplifier: Amplifier = {
      number: entry.number,
      gain: gainOf(raw, entry, options, warnings),
      readNoise: readNoiseOf(raw, entry, overscan.sections.length > 0, options, assumptions, warnings),
      data: data[i],
      overscan: overscan.sections,
      levelFor: overscan.levelFor,
      overscanSkip: overscan.skip,
      place: places[i],
    };
    if (entry.biasLevelAdu !== undefined) amplifier.biasLevelAdu = entry.biasLevelAdu;
    return amplifier;
  });
  refuseOverlaps(raw, amplifiers);
  const dispersionAxis = dispersionAxisOf(raw, spectrograph, assumptions);
  const saturationAdu = saturationOf(raw, spectrograph, assumptions);
  const bare = {
    axis1,
    axis2,
    dispersionAxis,
    data: data.map((section) => formatSection(section)),
    place: original.map((section) => formatSection(section)),
    binning,
  };
  const geometry: DetectorGeometry = { ...bare, digest: geometryDigest(bare) };
  return { nx: raw.nx, ny: raw.ny, amplifiers, dispersionAxis, saturationAdu, geometry, assumptions, warnings };
}

function dataSection(raw: RawImage, keys: AmplifierKeys, n: number, assumptions: string[]): Section {
  if (keys.data) return readSection(raw, keys.data.value, keys.data.from);
  if (n > 1) {
    throw new DetectorError(
      `${raw.name}: amplifier ${keys.number} of ${n} has no data section (DATASEC${keys.number}); give it in the spectrograph file.`,
    );
  }
  if (keys.overscan) {
    throw new DetectorError(
      `${raw.name}: an overscan section (${keys.overscan.from}) is given but no data section; give DATASEC, or data in the spectrograph file.`,
    );
  }
  assumptions.push(`${raw.name}: no sections are given, so the whole image is taken as data without overscan.`);
  return { x1: 1, x2: raw.nx, y1: 1, y2: raw.ny };
}

function gainOf(raw: RawImage, keys: AmplifierKeys, options: LayoutOptions, warnings: string[]): number {
  if (keys.gain && keys.gain.value > 0 && Number.isFinite(keys.gain.value)) return keys.gain.value;
  const found = keys.gain ? `${keys.gain.from} is ${keys.gain.value}` : "the header has no gain";
  const sentence = `${raw.name}: amplifier ${keys.number}: ${found}, but a gain over 0 e⁻/ADU is needed, since every error bar hangs on it; give it in the spectrograph file.`;
  if (options.gainMayBeMissing !== true) throw new DetectorError(sentence);
  warnings.push(sentence);
  return Number.NaN;
}

function readNoiseOf(
  raw: RawImage,
  keys: AmplifierKeys,
  hasOverscan: boolean,
  options: LayoutOptions,
  assumptions: string[],
  warnings: string[],
): number {
  if (keys.readNoise && keys.readNoise.value > 0 && Number.isFinite(keys.readNoise.value)) return keys.readNoise.value;
  const found = keys.readNoise ? `${keys.readNoise.from} is ${keys.readNoise.value}` : "the header has no read noise";
  if (hasOverscan) {
    assumptions.push(`${raw.name}: amplifier ${keys.number}: ${found}, so it is measured from the overscan.`);
    return Number.NaN;
  }
  const sentence = `${raw.name}: amplifier ${keys.number}: ${found} and there is no overscan to measure it from; give read_noise (e⁻) in the spectrograph file.`;
  if (options.gainMayBeMissing !== true) throw new DetectorError(sentence);
  warnings.push(sentence);
  return Number.NaN;
}

function dispersionAxisOf(raw: RawImage, spectrograph: Spectrograph | undefined, assumptions: string[]): 1 | 2 {
  const told = spectrograph?.detector.dispersionAxis;
  const card = numberOf(raw, ["DISPAXIS", "DISPAXI", "DISPDIR"]);
  if (told !== undefined) {
    if (card && card.value !== told) {
      assumptions.push(
        `${raw.name}: dispersion along axis ${told} is taken from ${spectrograph!.file}, not the header's ${card.keyword} ${card.value}.`,
      );
    }
    return told;
  }
  if (card === undefined) {
    assumptions.push(`${raw.name}: no dispersion axis is given, so wavelength is taken to run along axis 1.`);
    return 1;
  }
  if (card.value === 1 || card.value === 2) return card.value;
  throw new DetectorError(
    `${raw.name}: ${card.keyword} is ${card.value}, but 1 or 2 was expected; give dispersion_axis in the spectrograph file.`,
  );
}

function saturationOf(raw: RawImage, spectrograph: Spectrograph | undefined, assumptions: string[]): number {
  const told = spectrograph?.detector.saturationAdu;
  const card = numberOf(raw, ["SATURATE", "SATLEVEL", "SATURATA"]);
  if (told !== undefined) {
    if (card && card.value !== told) {
      assumptions.push(
        `${raw.name}: saturation at ${told} ADU is taken from ${spectrograph!.file}, not the header's ${card.keyword} ${card.value}.`,
      );
    }
    return told;
  }
  if (card && card.value > 0) return card.value;
  assumptions.push(`${raw.name}: no saturation level is given; 65535 ADU, the ceiling of 16-bit converters, is taken.`);
  return 65535;
}

/** CCDSUM '2 1', XBINNING and YBINNING, or CCDBIN1 and CCDBIN2; [1, 1] when none is given. */
function binningOf(raw: RawImage): [number, number] {
  const text = textOf(raw, ["CCDSUM"])?.value;
  const pair = text?.split(/[\s,x]+/).map(Number);
  const x = pair?.[0] ?? numberOf(raw, ["XBINNING", "CCDBIN1", "CCDXBIN"])?.value ?? 1;
  const y = pair?.[1] ?? numberOf(raw, ["YBINNING", "CCDBIN2", "CCDYBIN"])?.value ?? 1;
  if (Number.isInteger(x) && Number.isInteger(y) && x >= 1 && y >= 1) return [x, y];
  throw new DetectorError(
    `${raw.name}: binning is given as '${text ?? `${x} ${y}`}', but two whole numbers over 0 were expected; correct CCDSUM or XBINNING and YBINNING.`,
  );
}

/** Shape of an amplifier's data, for callers that loop over it. */
export function amplifierSize(amplifier: Amplifier): { nx: number; ny: number } {
  return sectionSize(amplifier.data);
}
