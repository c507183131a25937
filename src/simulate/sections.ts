/** FITS sections, `[x1:x2,y1:y2]`, from 1, both ends included: here as ranges that count from 0 and end before `to`. */

export interface Section {
  x0: number;
  x1: number;
  y0: number;
  y1: number;
}

export function parseSection(text: string): Section | undefined {
  const match = /^\[(\d+):(\d+),(\d+):(\d+)\]$/.exec(text.replace(/\s/g, ""));
  if (!match) return undefined;
  const [x1, x2, y1, y2] = match.slice(1).map(Number);
  if (x1 < 1 || y1 < 1 || x2 < x1 || y2 < y1) return undefined;
  return { x0: x1 - 1, x1: x2, y0: y1 - 1, y1: y2 };
}

export function formatSection(section: Section): string {
  return `[${section.x0 + 1}:${section.x1},${section.y0 + 1}:${section.y1}]`;
}
