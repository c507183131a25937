/** FITS sections, "[x1:x2,y1:y2]": pixels count from 1 and both ends belong to it. */

export interface Section {
  x1: number;
  x2: number;
  y1: number;
  y2: number;
}

const SECTION = /^\s*\[\s*(\d+)\s*:\s*(\d+)\s*,\s*(\d+)\s*:\s*(\d+)\s*\]\s*$/;

/** Reads "[x1:x2,y1:y2]". `what`: where it stands ("DATASEC1 of flat.fits"), to open the sentence of an error.
 * `nx`, `ny`: size of the image it must lie in, when known.
 * @throws RangeError when it is written otherwise, counts from 0, runs backwards or leaves the image. */
export function parseSection(text: string, what = "section", nx = Infinity, ny = Infinity): Section {
  const match = SECTION.exec(text);
  if (match === null) throw new RangeError(`${what}: "${text}" is not a section; write it as [x1:x2,y1:y2].`);
  const [x1, x2, y1, y2] = match.slice(1).map(Number);
  for (const [name, from, to, size] of [
    ["x", x1, x2, nx],
    ["y", y1, y2, ny],
  ] as const) {
    if (from < 1) throw new RangeError(`${what}: "${text}" starts at ${name} = 0, but sections count from 1.`);
    if (to < from) {
      throw new RangeError(`${what}: "${text}" runs backwards in ${name}; write it from low to high.`);
    }
    if (to > size) {
      throw new RangeError(`${what}: "${text}" ends at ${name} = ${to}, but the image ends at ${size}; correct it.`);
    }
  }
  return { x1, x2, y1, y2 };
}

/** "[x1:x2,y1:y2]", without blanks. */
export function formatSection({ x1, x2, y1, y2 }: Section): string {
  return `[${x1}:${x2},${y1}:${y2}]`;
}

/** Columns and rows of a section. */
export function sectionSize({ x1, x2, y1, y2 }: Section): { nx: number; ny: number } {
  return { nx: x2 - x1 + 1, ny: y2 - y1 + 1 };
}
