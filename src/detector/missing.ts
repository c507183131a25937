/** Pixels without a value: NaN, columns or rows that were never read (one constant all along), and counts of 0 where
 * the electronic level alone is far above it. */
import { type Section, sectionSize } from "../fits/sections.js";
import { DetectorError } from "./detectorError.js";
import type { OverscanLevel } from "./overscan.js";
import type { RawImage } from "./raw.js";

/** Fewer equal pixels than this may be chance. */
const SHORTEST_LINE = 16;
const PEDESTAL_SIGMAS = 20;

export interface MissingFound {
  nanPixels: number;
  constantColumns: number;
  constantRows: number;
  zeroPixels: number;
}

/** True when 0 ADU is far under the level that the electronics alone give. */
export function zeroIsImpossible(level: OverscanLevel | undefined): boolean {
  if (level === undefined) return false;
  const pedestal = level.level.reduce((least, value) => Math.min(least, value), Number.POSITIVE_INFINITY);
  return pedestal > PEDESTAL_SIGMAS * Math.max(1, level.readNoiseAdu);
}

export interface ConstantLines {
  /** Counted from 0 in the section. */
  columns: number[];
  rows: number[];
}

/** Columns and rows of an amplifier's data that were not read.
 * @throws DetectorError when every pixel of the section is the same. */
export function constantLines(raw: RawImage, data: Section, ceiling: number): ConstantLines {
  const { nx, ny } = sectionSize(data);
  const start = (data.y1 - 1) * raw.nx + data.x1 - 1;
  const section = { raw, data, ceiling };
  const columns = constantAmong(section, nx, (x) => ({ from: start + x, step: raw.nx, n: ny, skip: [] }));
  const rows = constantAmong(section, ny, (y) => ({ from: start + y * raw.nx, step: 1, n: nx, skip: columns }));
  return { columns, rows };
}

interface Line {
  from: number;
  step: number;
  n: number;
  /** Pixels of it that are known to be missing. */
  skip: number[];
}

function constantAmong(
  { raw, data, ceiling }: { raw: RawImage; data: Section; ceiling: number },
  nLine: number,
  lineOf: (line: number) => Line,
): number[] {
  const lines: number[] = [];
  if (lineOf(0).n < SHORTEST_LINE) return lines;
  for (let line = 0; line < nLine; line++) if (isConstant(raw.data, lineOf(line), ceiling)) lines.push(line);
  // When most lines are constant it is the picture that is so (without noise), not the readout that failed.
  if (2 * lines.length <= nLine) return lines;
  refuseUniform(raw, data);
  return [];
}

/** All finite pixels that are not yet known to be missing equal, and below the ceiling (a bleed may fill a column), with
 * enough of them to tell. */
function isConstant(data: Float32Array | Float64Array, { from, step, n, skip }: Line, ceiling: number): boolean {
  let first = Number.NaN;
  let count = 0;
  let skipped = 0;
  for (let k = 0; k < n; k++) {
    const value = data[from + k * step];
    if (k === skip[skipped]) {
      skipped++;
      continue;
    }
    if (!Number.isFinite(value)) continue;
    if (count === 0) first = value;
    if (value !== first) return false;
    count++;
  }
  return count >= SHORTEST_LINE && first < ceiling;
}

function refuseUniform(raw: RawImage, { x1, x2, y1, y2 }: Section): void {
  const first = raw.data[(y1 - 1) * raw.nx + x1 - 1];
  for (let y = y1 - 1; y < y2; y++) {
    for (let x = x1 - 1; x < x2; x++) if (raw.data[y * raw.nx + x] !== first) return;
  }
  throw new DetectorError(
    `${raw.name}: every pixel of the data section is ${first} ADU, but a picture was expected; the readout failed, take another frame.`,
  );
}
