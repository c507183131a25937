/** Where amplifiers' pixels go: a grid of amplifiers over the assembled frame, side by side in the file.
 *
 *     file row:  [overscan A][data A][data B][overscan B]   …[data C][overscan C]
 *
 * The first column of amplifiers carries its overscan before its data, all others after; amplifiers above one another
 * share the file's columns. */
import { formatSection, parseSection, type Section } from "./sections.js";

export interface AmplifierLayout {
  /** In the assembled frame; in the file: its pixels and its overscan. */
  place: Section;
  data: Section;
  overscan: Section;
}

export interface ReadoutLayout {
  /** Size of the file's image. */
  n1: number;
  n2: number;
  amplifiers: AmplifierLayout[];
}

interface Wiring {
  size: [number, number];
  amplifier: { place?: string | undefined; overscan: number }[];
}

/** The layout, or what is wrong with it. */
export function layOutReadout({ size, amplifier }: Wiring): ReadoutLayout | string {
  const [n1, n2] = size;
  const places: Section[] = [];
  for (const [i, { place }] of amplifier.entries()) {
    const text = place ?? `[1:${n1},1:${n2}]`;
    const section = parseSection(text);
    if (!section)
      return `place of number ${i + 1} is ${JSON.stringify(text)}, but a section reads [1:${n1},1:${n2}]; correct it`;
    if (section.x1 > n1 || section.y1 > n2)
      return `place of number ${i + 1}, ${text}, leaves the frame of ${n1} × ${n2} pixels; correct it`;
    places.push(section);
  }
  const complaint = checkTiling(places, n1 * n2);
  if (complaint) return complaint;
  return {
    n1: fileWidth(places, amplifier, n1),
    n2,
    amplifiers: places.map((place) => placeInFile(place, places, amplifier)),
  };
}

function checkTiling(places: Section[], nPixel: number): string | undefined {
  let covered = 0;
  for (const [i, a] of places.entries()) {
    covered += (a.x1 - a.x0) * (a.y1 - a.y0);
    for (const b of places.slice(0, i)) {
      if (a.x0 < b.x1 && b.x0 < a.x1 && a.y0 < b.y1 && b.y0 < a.y1) {
        return `${formatSection(a)} and ${formatSection(b)} overlap; every pixel belongs to one amplifier`;
      }
      if (a.x0 < b.x1 && b.x0 < a.x1 && (a.x0 !== b.x0 || a.x1 !== b.x1)) {
        return `${formatSection(a)} and ${formatSection(b)} share columns but not the same ones; amplifiers form a grid`;
      }
    }
  }
  return covered === nPixel
    ? undefined
    : `the places cover ${covered} of ${nPixel} pixels; every pixel belongs to one amplifier`;
}

function stripWidth(x0: number, places: Section[], amplifier: Wiring["amplifier"]): number {
  return Math.max(...places.map((place, i) => (place.x0 === x0 ? amplifier[i].overscan : 0)));
}

function fileWidth(places: Section[], amplifier: Wiring["amplifier"], n1: number): number {
  const starts = [...new Set(places.map((place) => place.x0))];
  return starts.reduce((sum, x0) => sum + stripWidth(x0, places, amplifier), n1);
}

function placeInFile(place: Section, places: Section[], amplifier: Wiring["amplifier"]): AmplifierLayout {
  const starts = [...new Set(places.map((other) => other.x0))].sort((a, b) => a - b);
  let at = 0;
  for (const start of starts) {
    if (start >= place.x0) break;
    at += stripWidth(start, places, amplifier) + places.find((other) => other.x0 === start)!.x1 - start;
  }
  const strip = stripWidth(place.x0, places, amplifier);
  const width = place.x1 - place.x0;
  const [dataAt, stripAt] = place.x0 === 0 ? [at + strip, at] : [at, at + width];
  const own = amplifier[places.indexOf(place)].overscan;
  return {
    place,
    data: { ...place, x0: dataAt, x1: dataAt + width },
    overscan: { ...place, x0: stripAt, x1: stripAt + own },
  };
}
