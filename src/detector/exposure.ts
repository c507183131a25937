/** What kind of exposure a frame is, and how long it lasted, as its header tells it. */
import { cardOf, numberOf, type RawImage, textOf } from "./raw.js";

export type ExposureKind =
  | "bias"
  | "dark"
  | "detector flat"
  | "fibre flat"
  | "flat"
  | "arc"
  | "twilight"
  | "science"
  | "unknown";

/** Words met in IMAGETYP, OBSTYPE and OBJECT, the more special first (common practice). */
const WORDS: [RegExp, ExposureKind][] = [
  [/\b(bias|zero)/, "bias"],
  [/\bdark/, "dark"],
  [/\b(det(ector)?[ _-]?flat|d[ _-]?flat|pix(el)?[ _-]?flat|milky)/, "detector flat"],
  [/\b(sky[ _-]?flat|twi)/, "twilight"],
  [/\b(fib(re|er)?[ _-]?flat|f[ _-]?flat|trace)/, "fibre flat"],
  [/flat|\bquartz\b/, "flat"],
  [/\b(arc|comp(arison)?\b|thar|wave(length)?[ _-]?cal|calib lamp)/, "arc"],
  [/\b(object|science|sci|light|target|sky)\b/, "science"],
];

export interface ExposureKindFound {
  kind: ExposureKind;
  /** "IMAGETYP 'bias'", for messages; empty when nothing was found. */
  said: string;
}

/** IMAGETYP or OBSTYPE decides; OBJECT is asked only when they are silent. */
export function exposureKind(raw: RawImage): ExposureKindFound {
  const cards = [["IMAGETYP", "IMAGETYPE", "OBSTYPE", "FRAMETYP", "EXPTYPE"], ["OBJECT"]];
  for (const keywords of cards) {
    const card = textOf(raw, keywords);
    if (card === undefined) continue;
    const word = card.value.toLowerCase();
    const hit = WORDS.find(([pattern]) => pattern.test(word));
    if (hit) return { kind: hit[1], said: `${card.keyword} '${card.value}'` };
  }
  return { kind: "unknown", said: "" };
}

/** EXPTIME or EXPOSURE, seconds; NaN when the header does not say. */
export function exposureSeconds(raw: RawImage): number {
  return secondsOf(raw, ["EXPTIME", "EXPOSURE", "ITIME"]);
}

/** Time over which dark current gathered: DARKTIME, else the exposure time, seconds; NaN when neither is given. */
export function darkSeconds(raw: RawImage): number {
  const dark = secondsOf(raw, ["DARKTIME"]);
  return Number.isNaN(dark) ? exposureSeconds(raw) : dark;
}

function secondsOf(raw: RawImage, keywords: string[]): number {
  if (cardOf(raw, keywords) === undefined) return Number.NaN;
  const seconds = numberOf(raw, keywords)!.value;
  return seconds >= 0 ? seconds : Number.NaN;
}
