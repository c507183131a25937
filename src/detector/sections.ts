/** Sections of a detector: read against the image they lie in, placed in the assembled frame, checked for overlaps. */
import { formatSection, parseSection, type Section, sectionSize } from "../fits/sections.js";
import type { AmplifierKeys } from "./amplifierKeys.js";
import type { Amplifier } from "./amplifiers.js";
import { DetectorError } from "./detectorError.js";
import type { RawImage } from "./raw.js";

/** Trailing charge of the last image columns reaches this far into an overscan that follows them (common practice). */
const DEFAULT_SKIP = 2;

/** A section of the file. @throws DetectorError when it is no section or leaves the image. */
export function readSection(raw: RawImage, text: string, from: string): Section {
  try {
    return parseSection(text, `${raw.name}: ${from}`, raw.nx, raw.ny);
  } catch (error) {
    if (!(error instanceof RangeError)) throw error;
    const hint = /leaves|ends at/.test(error.message) ? turnedHint(raw, text) : "";
    throw new DetectorError(hint === "" ? error.message : error.message.replace(/correct it\.$/, hint));
  }
}

/** A picture turned without its sections: they leave it along one axis, and nearly fill the other's length instead. */
function turnedHint(raw: RawImage, text: string): string {
  const { x2, y2 } = parseSection(text);
  const fits = x2 <= raw.ny && y2 <= raw.nx;
  const fills = (x2 > raw.nx && x2 > 0.75 * raw.ny) || (y2 > raw.ny && y2 > 0.75 * raw.nx);
  return !(fits && fills)
    ? ""
    : "it would fit with the axes exchanged: if the picture was turned, give data, overscan, place and dispersion_axis in the spectrograph file.";
}

export interface OverscanFound {
  sections: Section[];
  levelFor: "rows" | "columns";
  skip: number;
}

/** The overscan of one amplifier without its skipped columns. */
export function overscanOf(raw: RawImage, keys: AmplifierKeys, data: Section, assumptions: string[]): OverscanFound {
  if (keys.overscan === undefined) return { sections: [], levelFor: "rows", skip: 0 };
  const found = keys.overscan.value.map((text) => {
    const section = readSection(raw, text, keys.overscan!.from);
    return { section, levelFor: sideOf(raw, keys, section, data) };
  });
  // Overscan beside the data follows the drift from row to row; a second one above the data adds nothing to it.
  const levelFor = found.some((entry) => entry.levelFor === "rows") ? "rows" : "columns";
  const used = found.filter((entry) => entry.levelFor === levelFor).map((entry) => entry.section);
  if (used.length < found.length) {
    assumptions.push(
      `${raw.name}: amplifier ${keys.number}: of its overscan sections only those beside the data are used.`,
    );
  }
  const follows = used.every((section) => (levelFor === "rows" ? section.x1 > data.x2 : section.y1 > data.y2));
  const skip = keys.overscanSkip ?? (follows ? DEFAULT_SKIP : 0);
  if (keys.overscanSkip === undefined && skip > 0) {
    assumptions.push(
      `${raw.name}: amplifier ${keys.number}: the overscan follows the data, so its first ${skip} ${levelFor === "rows" ? "columns" : "rows"}, where trailing charge may sit, are left out (overscan_skip).`,
    );
  }
  return { sections: used.map((section) => skipped(raw, keys, section, data, levelFor, skip)), levelFor, skip };
}

function sideOf(raw: RawImage, keys: AmplifierKeys, overscan: Section, data: Section): "rows" | "columns" {
  const sharesX = overscan.x1 <= data.x2 && data.x1 <= overscan.x2;
  const sharesY = overscan.y1 <= data.y2 && data.y1 <= overscan.y2;
  if (sharesY && !sharesX) return "rows";
  if (sharesX && !sharesY) return "columns";
  const what = sharesX ? "overlaps the data section" : "lies neither beside nor above the data section";
  throw new DetectorError(
    `${raw.name}: amplifier ${keys.number}: overscan ${formatSection(overscan)} ${what} ${formatSection(data)}; correct ${keys.overscan!.from} or ${keys.data?.from ?? "the data section"}.`,
  );
}

/** Takes off the columns (rows) next to the data. */
function skipped(
  raw: RawImage,
  keys: AmplifierKeys,
  section: Section,
  data: Section,
  levelFor: "rows" | "columns",
  skip: number,
): Section {
  const left = { ...section };
  if (levelFor === "rows") {
    if (section.x1 > data.x2) left.x1 += skip;
    else left.x2 -= skip;
  } else if (section.y1 > data.y2) left.y1 += skip;
  else left.y2 -= skip;
  if (left.x2 >= left.x1 && left.y2 >= left.y1) return left;
  throw new DetectorError(
    `${raw.name}: amplifier ${keys.number}: nothing is left of overscan ${formatSection(section)} after skipping ${skip}; give a smaller overscan_skip in the spectrograph file.`,
  );
}

/** Where each amplifier's data go. `original`: as they were given; `places`: moved so that the frame starts at [1, 1]. */
export function placesOf(
  raw: RawImage,
  keys: AmplifierKeys[],
  data: Section[],
  binning: [number, number],
  assumptions: string[],
) {
  const nGiven = keys.filter((entry) => entry.place !== undefined).length;
  if (nGiven > 0 && nGiven < keys.length) {
    const without = keys.find((entry) => entry.place === undefined)!.number;
    throw new DetectorError(
      `${raw.name}: amplifier ${without} has no place in the assembled frame while others have one; give CCDSEC${without}, or place in the spectrograph file.`,
    );
  }
  const original = nGiven > 0 ? keys.map((entry, i) => givenPlace(raw, entry, data[i], binning)) : closedUp(data);
  if (nGiven === 0 && keys.length > 1) {
    assumptions.push(
      `${raw.name}: no places are given, so the data sections are pushed together in the order they lie.`,
    );
  }
  const x0 = Math.min(...original.map((section) => section.x1)) - 1;
  const y0 = Math.min(...original.map((section) => section.y1)) - 1;
  const places = original.map(({ x1, x2, y1, y2 }) => ({ x1: x1 - x0, x2: x2 - x0, y1: y1 - y0, y2: y2 - y0 }));
  const axis1 = Math.max(...places.map((section) => section.x2));
  const axis2 = Math.max(...places.map((section) => section.y2));
  const covered = places.reduce((sum, section) => sum + sectionSize(section).nx * sectionSize(section).ny, 0);
  // A stray digit in one section would otherwise ask for a frame of any size.
  if (axis1 * axis2 > 4 * covered + 1e6) {
    throw new DetectorError(
      `${raw.name}: the amplifiers' places span ${axis1} × ${axis2} pixels but cover only ${covered}; correct CCDSEC, or place in the spectrograph file.`,
    );
  }
  return { places, original, axis1, axis2 };
}

function givenPlace(raw: RawImage, keys: AmplifierKeys, data: Section, binning: [number, number]): Section {
  const place = sectionAnywhere(raw, keys.place!.value, keys.place!.from);
  const from = sectionSize(data);
  const to = sectionSize(place);
  if (from.nx === to.nx && from.ny === to.ny) return place;
  // CCDSEC commonly counts unbinned pixels.
  const binned = {
    x1: Math.floor((place.x1 - 1) / binning[0]) + 1,
    x2: Math.floor((place.x1 - 1) / binning[0]) + Math.floor(to.nx / binning[0]),
    y1: Math.floor((place.y1 - 1) / binning[1]) + 1,
    y2: Math.floor((place.y1 - 1) / binning[1]) + Math.floor(to.ny / binning[1]),
  };
  const size = sectionSize(binned);
  if (from.nx === size.nx && from.ny === size.ny) return binned;
  throw new DetectorError(
    `${raw.name}: amplifier ${keys.number}: data ${formatSection(data)} has ${from.nx} × ${from.ny} pixels, but its place ${formatSection(place)} has ${to.nx} × ${to.ny}; correct ${keys.place!.from} or the data section.`,
  );
}

function sectionAnywhere(raw: RawImage, text: string, from: string): Section {
  try {
    return parseSection(text, `${raw.name}: ${from}`);
  } catch (error) {
    throw error instanceof RangeError ? new DetectorError(error.message) : error;
  }
}

/** Data sections without what lies between them: distinct column ranges side by side, distinct row ranges stacked. */
function closedUp(data: Section[]): Section[] {
  const offsets = (from: "x1" | "y1", to: "x2" | "y2") => {
    const starts = new Map<number, number>();
    for (const section of data)
      starts.set(section[from], Math.max(starts.get(section[from]) ?? 0, section[to] - section[from] + 1));
    let at = 1;
    const offset = new Map<number, number>();
    for (const start of [...starts.keys()].sort((a, b) => a - b)) {
      offset.set(start, at);
      at += starts.get(start)!;
    }
    return offset;
  };
  const x = offsets("x1", "x2");
  const y = offsets("y1", "y2");
  return data.map((section) => {
    const { nx, ny } = sectionSize(section);
    const x1 = x.get(section.x1)!;
    const y1 = y.get(section.y1)!;
    return { x1, x2: x1 + nx - 1, y1, y2: y1 + ny - 1 };
  });
}

/** @throws DetectorError when two data sections, two places, or data and overscan share pixels. */
export function refuseOverlaps(raw: RawImage, amplifiers: Amplifier[]): void {
  for (const a of amplifiers) {
    for (const b of amplifiers) {
      if (a.number < b.number) {
        refuse(raw, a, "data section", a.data, b, "data section", b.data);
        refuse(raw, a, "place", a.place, b, "place", b.place);
      }
      for (const overscan of b.overscan) refuse(raw, a, "data section", a.data, b, "overscan", overscan);
    }
  }
}

function refuse(raw: RawImage, a: Amplifier, nameA: string, one: Section, b: Amplifier, nameB: string, two: Section) {
  const apart = one.x2 < two.x1 || two.x2 < one.x1 || one.y2 < two.y1 || two.y2 < one.y1;
  if (apart) return;
  throw new DetectorError(
    `${raw.name}: the ${nameA} ${formatSection(one)} of amplifier ${a.number} overlaps the ${nameB} ${formatSection(two)} of amplifier ${b.number}; correct the header or give both in the spectrograph file.`,
  );
}
