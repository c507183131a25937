/** What rebin prints. */
import { z } from "zod";

const count = z.int().min(0);

export const rebinKeys = {
  output: z.string(),
  spectra: z.string().describe("the file's name"),
  grid: z.strictObject({
    kind: z.enum(["linear", "log"]),
    medium: z.enum(["air", "vacuum"]),
    start: z.number().describe("middle of the first bin, Å"),
    end: z.number().describe("middle of the last bin, Å"),
    step: z.number().describe("Å, or in ln of wavelength"),
    kmPerSecond: z.number().nullable().describe("step as a velocity, log only"),
    bins: count,
  }),
  reconstruction: z.enum(["constant", "parabolic"]),
  mostLost: z.number().describe("share of a bin without usable pixels up to which the rest makes good for it"),
  fibres: count.describe("with wavelengths"),
  usablePoints: count,
  points: count.describe("bins of fibres with wavelengths"),
  neighbourCorrelation: z.number().nullable().describe("median correlation of a bin with the next"),
  neglectedShare: z
    .number()
    .nullable()
    .describe("what bins beyond the next would add to the variance of a wide sum, as a share of one bin's"),
};
