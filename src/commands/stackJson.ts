/** What 'hatchel stack --json' prints besides what all commands do. */
import { z } from "zod";

const number = z.number().nullable();
const measured = z.strictObject({ value: z.number(), error: number });

export const stackKeys = {
  output: z.string(),
  geometry: z
    .strictObject({ digest: z.string(), size: z.tuple([z.number(), z.number()]), dispersionAxis: z.number() })
    .describe("the readout that the calibrations are for; size without overscan, FITS axes 1 and 2"),
  roles: z
    .array(
      z.strictObject({
        role: z.enum(["bias", "dark", "pixel flat"]),
        frames: z.array(
          z.strictObject({
            name: z.string(),
            used: z.boolean(),
            reason: z.string().nullable().describe("why it was left out"),
            levelElectrons: number.describe("median, other calibrations taken off"),
            noiseElectrons: number.describe("scatter of one pixel against its neighbour"),
            clippedShare: number.describe("of its pixels, against read noise and gain"),
          }),
        ),
        used: z.int(),
        leftOut: z.int(),
        level: number.describe(
          "median of the stack: e- for bias, e-/s for dark, 1 for pixel flats scaled to their levels",
        ),
        noise: number.describe("median error of a pixel of the stack, the same units"),
        unusableShare: number.describe("pixels without a usable value in it"),
      }),
    )
    .describe("each role that frames were given for, in the order in which they are used"),
  amplifiers: z
    .array(
      z.strictObject({
        amplifier: z.int(),
        givenGain: number,
        gain: measured.nullable(),
        givenReadNoise: number,
        readNoise: measured.nullable(),
        readNoiseFrom: z.string().nullable(),
      }),
    )
    .describe("gain in e-/ADU and read noise in e-, as given, and as the first two frames of a role show them"),
  badPixels: number.describe("pixels that the bad-pixel image excludes; null without one"),
};
