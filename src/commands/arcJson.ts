/** What `arc` prints. */
import { z } from "zod";

const number = z.number().nullable();
const count = z.int().min(0);

export const arcKeys = {
  output: z.string(),
  medium: z.enum(["air", "vacuum"]),
  rangeAngstrom: z.tuple([number, number]).describe("at the first and at the last column, the fibres' median"),
  linesFromAngstrom: number.describe("wavelengths of the outermost lines used; beyond, the scale is extrapolated"),
  linesToAngstrom: number,
  angstromPerPixel: number.describe("in the middle; negative when wavelength falls"),
  degree: count.describe("of the fibres' Legendre series in x"),
  identification: z
    .strictObject({ fibre: count, matched: count, score: number, runnerUpScore: number, reversed: z.boolean() })
    .describe("of the fibre, from 1, in which the lines were named: logarithms of likelihood against chance"),
  peaks: count.describe("found in all spectra"),
  unknownPeaks: count.describe("for which the list has no line"),
  lamps: z.array(
    z.strictObject({
      lamp: z.string(),
      lines: count.describe("different ones used"),
      points: count.describe("in all fibres"),
    }),
  ),
  leftOut: z
    .array(
      z.strictObject({
        wavelength: z.number(),
        lamp: z.string(),
        reason: z.string(),
        points: count,
        offAngstrom: number,
      }),
    )
    .describe("lines seen but not used in most fibres, and why"),
  rmsPixels: number,
  rmsKilometresPerSecond: number,
  errorPixels: number.describe("standard error of a fibre's scale, median"),
  worstRmsPixels: number,
  worstFibre: count,
  offsetScatterPixels: number.describe("of fibres' own offsets along dispersion"),
  listScatterAngstrom: number.describe("of lines about their wavelengths in the list, all fibres alike"),
  fwhmPixels: number,
  resolution: z
    .strictObject({ first: number, middle: number, last: number })
    .describe("wavelength over FWHM at the first, middle and last column"),
  exposures: z.array(
    z.strictObject({ name: z.string(), offsetPixels: number.describe("against the first"), traceShiftPixels: number }),
  ),
  fibres: z.array(
    z.strictObject({
      fibre: count,
      state: z.enum(["fitted", "filled", "none"]),
      lines: count,
      rmsPixels: number,
      errorPixels: number,
    }),
  ),
};
