/** What `throughput` prints, and what a calibrated `extract` adds. */
import { z } from "zod";

const number = z.number().nullable();
const count = z.int().min(0);

export const throughputKeys = {
  output: z.string(),
  frames: z.array(
    z.strictObject({
      frame: z.string(),
      levelScatter: number.describe("robust standard deviation of its fibres' levels about those of all frames"),
    }),
  ),
  shapeFrames: z.array(z.string()).describe("fibre flats that the shape along x is from; none: from the frames"),
  medianError: number.describe("of one point, relative"),
  levels: z
    .array(z.strictObject({ fibre: count, throughput: number }))
    .describe("median over x, relative to the median fibre; null for dead ones"),
  weakFibres: z.array(count).describe("below 0.2 of the median"),
};

const check = z.strictObject({
  fibre: count,
  leftOut: z.boolean(),
  residualShare: number.describe("light left between lines over the sky of the others there"),
  residualError: number,
  pullBetween: number.describe("robust standard deviation about 0 of what is left over its error, between lines"),
  pullAtLines: number,
});

export const calibrationKeys = {
  calibration: z
    .strictObject({
      medium: z.enum(["air", "vacuum"]),
      zeroPoint: z
        .strictObject({ pixels: z.number(), error: number, lines: count })
        .nullable()
        .describe("of the frame's light against the arc's; null when not measured"),
      throughput: z.boolean().describe("whether spectra were divided by it"),
      sky: z
        .strictObject({
          scaled: z.boolean(),
          fibres: count.describe("that the sky was made from"),
          leftOut: z.array(count).describe("sky fibres that see something else"),
          clippedSamples: count,
          coefficients: count.describe("of the spline"),
          level: number.describe("median sky, e- per column of a fibre of throughput 1"),
          meanResidualShare: number.describe("mean of the checks' residuals, those left out aside"),
          pullBetween: number.describe("median of the checks'"),
          pullAtLines: number,
          checks: z.array(check).describe("each sky fibre foretold from the others"),
        })
        .nullable()
        .describe("null when it was left on"),
    })
    .nullable()
    .describe("null without --wavelengths"),
};
