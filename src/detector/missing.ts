/** Pixels without a value: NaN, columns or rows that were never read (one constant all along), and counts of 0 where
 * the electronic level alone is far above it. */
import type { Section } from "../fits/sections.js";
import type { DetectorLayout } from "./amplifiers.js";
import { DetectorError } from "./detectorError.js";
import { MaskBit } from "./frame.js";
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

/** Sets MaskBit.missing in `mask` [ny × nx of the file]. `levels`: one an amplifier.
 * @throws DetectorError when every pixel of the image is the same. */
export function markMissing(
  mask: Uint8Array,
  raw: RawImage,
  layout: DetectorLayout,
  levels: (OverscanLevel | undefined)[],
): MissingFound {
  const found: MissingFound = { nanPixels: 0, constantColumns: 0, constantRows: 0, zeroPixels: 0 };
  layout.amplifiers.forEach(({ data }, i) => {
    found.constantColumns += markConstant(mask, raw, data, "columns", layout.saturationAdu);
    found.constantRows += markConstant(mask, raw, data, "rows", layout.saturationAdu);
    const level = levels[i];
    const pedestal = level ? Math.min(...level.level) : 0;
    const zeroIsImpossible = level !== undefined && pedestal > PEDESTAL_SIGMAS * Math.max(1, level.readNoiseAdu);
    for (let y = data.y1 - 1; y < data.y2; y++) {
      for (let at = y * raw.nx + data.x1 - 1; at < y * raw.nx + data.x2; at++) {
        const isNan = !Number.isFinite(raw.data[at]);
        const isZero = zeroIsImpossible && raw.data[at] === 0;
        if (isNan) found.nanPixels++;
        if (isZero) found.zeroPixels++;
        if (isNan || isZero) mask[at] |= MaskBit.missing;
      }
    }
  });
  return found;
}

function markConstant(mask: Uint8Array, raw: RawImage, data: Section, which: "columns" | "rows", ceiling: number) {
  const columns = which === "columns";
  const step = columns ? raw.nx : 1;
  const stride = columns ? 1 : raw.nx;
  const n = columns ? data.y2 - data.y1 + 1 : data.x2 - data.x1 + 1;
  const nLine = columns ? data.x2 - data.x1 + 1 : data.y2 - data.y1 + 1;
  const start = (data.y1 - 1) * raw.nx + data.x1 - 1;
  if (n < SHORTEST_LINE) return 0;
  const lines: number[] = [];
  for (let line = 0; line < nLine; line++) {
    if (isConstant(raw.data, mask, start + line * stride, step, n, ceiling)) lines.push(start + line * stride);
  }
  // When most lines are constant it is the picture that is so (without noise), not the readout that failed.
  if (2 * lines.length > nLine) {
    refuseUniform(raw, data);
    return 0;
  }
  for (const from of lines) for (let k = 0; k < n; k++) mask[from + k * step] |= MaskBit.missing;
  return lines.length;
}

/** All finite pixels that are not yet known to be missing equal, and below the ceiling (a bleed may fill a column), with
 * enough of them to tell. */
function isConstant(
  data: ArrayLike<number>,
  mask: Uint8Array,
  from: number,
  step: number,
  n: number,
  ceiling: number,
): boolean {
  let first = Number.NaN;
  let count = 0;
  for (let k = 0; k < n; k++) {
    const value = data[from + k * step];
    if (!Number.isFinite(value) || mask[from + k * step] & MaskBit.missing) continue;
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
