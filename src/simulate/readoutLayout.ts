/** Where amplifiers' pixels go: a grid of amplifiers over the assembled frame, side by side in the file.
 *
 *     file row:  [overscan A][data A][data B][overscan B]   …[data C][overscan C]
 *
 * The first column of amplifiers carries its overscan before its data, all others after; amplifiers above one another
 * share the file's columns. */
import { formatSection, parseSection } from "../fits/sections.js";

/** Pixels that count from 0: columns x0 … x1 − 1 of rows y0 … y1 − 1. */
export interface Box {
  x0: number;
  x1: number;
  y0: number;
  y1: number;
}

/** As FITS writes it: from 1, both ends included. */
export function sectionOf({ x0, x1, y0, y1 }: Box): string {
  return formatSection({ x1: x0 + 1, x2: x1, y1: y0 + 1, y2: y1 });
}

export interface AmplifierLayout {
  /** In the assembled frame; in the file: its pixels and its overscan. */
  place: Box;
  data: Box;
  overscan: Box;
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
  const places: Box[] = [];
  for (const [i, { place }] of amplifier.entries()) {
    try {
      const { x1, x2, y1, y2 } = parseSection(place ?? `[1:${n1},1:${n2}]`, `place of number ${i + 1}`, n1, n2);
      places.push({ x0: x1 - 1, x1: x2, y0: y1 - 1, y1: y2 });
    } catch (error) {
      if (!(error instanceof RangeError)) throw error;
      return error.message.replace(/\.$/, "");
    }
  }
  const complaint = checkTiling(places, n1 * n2);
  if (complaint) return complaint;
  return {
    n1: fileWidth(places, amplifier, n1),
    n2,
    amplifiers: places.map((place) => placeInFile(place, places, amplifier)),
  };
}

function checkTiling(places: Box[], nPixel: number): string | undefined {
  let covered = 0;
  for (const [i, a] of places.entries()) {
    covered += (a.x1 - a.x0) * (a.y1 - a.y0);
    for (const b of places.slice(0, i)) {
      if (a.x0 < b.x1 && b.x0 < a.x1 && a.y0 < b.y1 && b.y0 < a.y1) {
        return `${sectionOf(a)} and ${sectionOf(b)} overlap; every pixel belongs to one amplifier`;
      }
      if (a.x0 < b.x1 && b.x0 < a.x1 && (a.x0 !== b.x0 || a.x1 !== b.x1)) {
        return `${sectionOf(a)} and ${sectionOf(b)} share columns but not the same ones; amplifiers form a grid`;
      }
    }
  }
  return covered === nPixel
    ? undefined
    : `the places cover ${covered} of ${nPixel} pixels; every pixel belongs to one amplifier`;
}

function stripWidth(x0: number, places: Box[], amplifier: Wiring["amplifier"]): number {
  return Math.max(...places.map((place, i) => (place.x0 === x0 ? amplifier[i].overscan : 0)));
}

function fileWidth(places: Box[], amplifier: Wiring["amplifier"], n1: number): number {
  const starts = [...new Set(places.map((place) => place.x0))];
  return starts.reduce((sum, x0) => sum + stripWidth(x0, places, amplifier), n1);
}

function placeInFile(place: Box, places: Box[], amplifier: Wiring["amplifier"]): AmplifierLayout {
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
