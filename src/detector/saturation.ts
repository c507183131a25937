/** Saturated pixels, and those beside them to which their charge bled along the detector's columns (FITS axis 2). */
import type { Growth } from "../reference/electrons.js";
import type { DetectorLayout } from "./amplifiers.js";
import type { RawImage } from "./raw.js";

/** A column run of this many saturated pixels is a bleed: its ends are half full further out (common practice). */
export const GROWTH: Growth = { bleed: 8, growShort: 1, growBleed: 3 };
/** A 16-bit converter's ceiling holds whatever the header says. */
const CEILING_16_BIT = 65535;

/** ADU from which on a pixel is saturated. */
export function saturationLimit({ bitpix }: RawImage, { saturationAdu }: DetectorLayout): number {
  return bitpix === 16 ? Math.min(saturationAdu, CEILING_16_BIT) : saturationAdu;
}
