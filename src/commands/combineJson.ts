/** What combine prints. */
import { z } from "zod";

const number = z.number().nullable();

export const combineKeys = {
  output: z.string(),
  reference: z.string().describe("frame whose exposure the spectra are scaled to: the first"),
  frames: z.array(
    z.strictObject({
      name: z.string(),
      exposureSeconds: number,
      scale: z.number().describe("light against the reference"),
      error: number,
      scaleFrom: z.enum(["light", "exposure time", "nothing"]),
      fibreScatter: number.describe("robust scatter of the fibres about that scale"),
      weight: z.number().describe("share of the information"),
      rejectedShare: z.number(),
      usableShare: z.number(),
      apartPixels: number.describe("largest difference of wavelengths from the reference; null without wavelengths"),
      moved: z.boolean().describe("whether light was moved to the reference's pixels"),
      lineShiftPixels: number.describe("of its lines against the reference, after moving"),
      lineShiftError: number,
    }),
  ),
  points: z.int().min(0),
  usablePoints: z.int().min(0),
  rejectedValues: z.int().min(0).describe("values of single frames left out as outliers"),
  medianChi2: number.describe("reduced chi-square of the frames about their mean, median over the points"),
  signalToNoise: z.strictObject({ faintest: number, median: number, brightest: number }),
  targets: z.array(z.strictObject({ name: z.string(), fibres: z.array(z.int()), medianSignalToNoise: number })),
};
