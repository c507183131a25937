/** What the header and the spectrograph file say of each amplifier, key by key: the file wins, and both are named. */
import type { Spectrograph, SpectrographAmplifier } from "../spectrograph.js";
import { DetectorError } from "./detectorError.js";
import { cardOf, numberOf, type RawImage, textOf } from "./raw.js";

/** A value with the place where it was found: "DATASEC1" or "bench.toml: amplifier 1, data". */
export interface Told<T> {
  value: T;
  from: string;
}

export interface AmplifierKeys {
  /** Counted from 1. */
  number: number;
  gain?: Told<number>;
  readNoise?: Told<number>;
  data?: Told<string>;
  overscan?: Told<string[]>;
  place?: Told<string>;
  overscanSkip?: number;
  biasLevelAdu?: number;
}

/** In the order in which they are believed (common practice; GAIN may be a controller setting where EGAIN exists). */
const GAIN = ["EGAIN", "GAIN"];
const READ_NOISE = ["RDNOISE", "READNOIS", "RON", "ENOISE"];
const DATA = ["DATASEC"];
const TRIM = ["TRIMSEC"];
const OVERSCAN = ["BIASSEC", "OVERSEC"];
const PLACE = ["CCDSEC", "DETSEC"];

const MOST_AMPLIFIERS = 64;

/** Merges both sources for every amplifier; `assumptions` receives where the file overrules the header. */
export function amplifierKeys(raw: RawImage, spectrograph: Spectrograph | undefined, assumptions: string[]) {
  const entries = spectrograph?.detector.amplifiers ?? [];
  const nHeader = amplifiersInHeader(raw);
  if (entries.length > 0 && nHeader > 1 && entries.length !== nHeader) {
    if (entries.some((entry) => entry.data === undefined)) {
      throw new DetectorError(
        `${spectrograph!.file} describes ${entries.length} amplifier(s), but ${raw.name} has ${nHeader}; give one [[detector.amplifier]] for each.`,
      );
    }
  }
  const n = entries.length > 0 ? entries.length : Math.max(1, nHeader);
  return Array.from({ length: n }, (_, index) => {
    const told = fromHeader(raw, index + 1, n);
    return entries[index] ? overruled(raw, told, entries[index], spectrograph!.file, assumptions) : told;
  });
}

/** NAMPS, or the highest number on a DATASECn, GAINn or BIASSECn card.
 * @throws DetectorError when NAMPS is no count, or sections are missing for some of them. */
function amplifiersInHeader(raw: RawImage): number {
  let numbered = 0;
  for (let i = 1; i <= MOST_AMPLIFIERS; i++) {
    if (cardOf(raw, [`DATASEC${i}`, `GAIN${i}`, `BIASSEC${i}`]) !== undefined) numbered = i;
  }
  const namps = numberOf(raw, ["NAMPS", "NAMP"])?.value;
  if (namps === undefined) return numbered;
  if (!Number.isInteger(namps) || namps < 1 || namps > MOST_AMPLIFIERS) {
    throw new DetectorError(
      `${raw.name}: NAMPS is ${namps}, but a count from 1 to ${MOST_AMPLIFIERS} was expected; correct it or describe the amplifiers in the spectrograph file.`,
    );
  }
  return namps;
}

function fromHeader(raw: RawImage, number: number, n: number): AmplifierKeys {
  const keywords = (names: string[]) => {
    const numbered = names.map((name) => `${name}${number}`);
    return n === 1 ? [...names, ...numbered] : numbered;
  };
  // Gain and read noise are sometimes given once for all amplifiers; sections never are.
  const shared = (names: string[]) => (n === 1 ? keywords(names) : [...keywords(names), ...names]);
  const keys: AmplifierKeys = { number };
  const gain = numberOf(raw, shared(GAIN));
  const readNoise = numberOf(raw, shared(READ_NOISE));
  const data = textOf(raw, keywords(DATA)) ?? textOf(raw, keywords(TRIM));
  const overscan = textOf(raw, keywords(OVERSCAN));
  const place = textOf(raw, keywords(PLACE));
  if (gain) keys.gain = { value: gain.value, from: gain.keyword };
  if (readNoise) keys.readNoise = { value: readNoise.value, from: readNoise.keyword };
  if (data) keys.data = { value: data.value, from: data.keyword };
  if (overscan) keys.overscan = { value: [overscan.value], from: overscan.keyword };
  if (place) keys.place = { value: place.value, from: place.keyword };
  return keys;
}

function overruled(
  raw: RawImage,
  header: AmplifierKeys,
  entry: SpectrographAmplifier,
  file: string,
  assumptions: string[],
): AmplifierKeys {
  const keys = { ...header };
  const take = (key: "gain" | "readNoise" | "data" | "overscan" | "place", word: string, unit: string) => {
    const value = entry[key];
    if (value === undefined) return;
    const old = header[key];
    if (old !== undefined && plain(old.value) !== plain(value)) {
      assumptions.push(
        `${raw.name}: amplifier ${header.number}: ${word} ${plain(value)}${unit} is taken from ${file}, not the header's ${old.from} ${plain(old.value)}${unit}.`,
      );
    }
    (keys as Record<string, unknown>)[key] = { value, from: `${file}: amplifier ${header.number}, ${word}` };
  };
  take("gain", "gain", " e⁻/ADU");
  take("readNoise", "read_noise", " e⁻");
  take("data", "data", "");
  take("overscan", "overscan", "");
  take("place", "place", "");
  if (entry.overscanSkip !== undefined) keys.overscanSkip = entry.overscanSkip;
  if (entry.biasLevelAdu !== undefined) keys.biasLevelAdu = entry.biasLevelAdu;
  return keys;
}

function plain(value: number | string | string[]): string {
  return (Array.isArray(value) ? value : [String(value)]).map((text) => text.replace(/\s/g, "")).join(" and ");
}
