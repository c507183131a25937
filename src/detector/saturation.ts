/** Saturated pixels, and those beside them to which their charge bled along the detector's columns (FITS axis 2). */
import type { Section } from "../fits/sections.js";
import type { DetectorLayout } from "./amplifiers.js";
import { MaskBit } from "./frame.js";
import type { RawImage } from "./raw.js";

/** A column run of this many saturated pixels is a bleed: its ends are half full further out (common practice). */
const BLEED_LENGTH = 8;
const GROW_SHORT = 1;
const GROW_BLEED = 3;
/** A 16-bit converter's ceiling holds whatever the header says. */
const CEILING_16_BIT = 65535;

/** Sets MaskBit.saturated in `mask` [ny × nx of the file]; returns how many pixels saturated before growing. */
export function markSaturated(mask: Uint8Array, raw: RawImage, layout: DetectorLayout): number {
  const limit = raw.bitpix === 16 ? Math.min(layout.saturationAdu, CEILING_16_BIT) : layout.saturationAdu;
  let n = 0;
  for (const { data } of layout.amplifiers) {
    for (let x = data.x1 - 1; x < data.x2; x++) n += markColumn(mask, raw, data, x, limit);
  }
  return n;
}

function markColumn(mask: Uint8Array, raw: RawImage, data: Section, x: number, limit: number): number {
  let n = 0;
  let y = data.y1 - 1;
  while (y < data.y2) {
    if (!(raw.data[y * raw.nx + x] >= limit)) {
      y++;
      continue;
    }
    let end = y;
    while (end < data.y2 && raw.data[end * raw.nx + x] >= limit) end++;
    const grow = end - y >= BLEED_LENGTH ? GROW_BLEED : GROW_SHORT;
    const to = Math.min(data.y2, end + grow);
    for (let at = Math.max(data.y1 - 1, y - grow); at < to; at++) mask[at * raw.nx + x] |= MaskBit.saturated;
    n += end - y;
    y = end;
  }
  return n;
}
