/** What `hatchel run --json` prints; night.json holds the same but for `made` and `kept`. */
import { z } from "zod";

const number = z.number().nullable();
const count = z.int().min(0);

const product = z.strictObject({
  product: z.string().describe("a file, or a folder of files"),
  made: z.boolean().describe("whether it is there"),
  reason: z.string().nullable().describe("why it is not there, one sentence"),
  facts: z.record(z.string(), z.json()).describe("figures of merit, assumptions and warnings of this product"),
});

export const runKeys = {
  output: z.string().describe("the folder of the products; night.json in it sums them up"),
  night: z.string(),
  made: count.describe("products made by this run"),
  kept: count.describe("products of an earlier run, whose inputs, options and program have not changed"),
  calibrations: z.array(product),
  frames: z.array(
    z.strictObject({
      frame: z.string(),
      object: z.string(),
      product: z.string().nullable(),
      verdict: z.enum(["good", "doubtful", "bad", "failed"]),
      reasons: z.array(z.string()).describe("why it is not good"),
      exposureSeconds: number,
      medianSignalToNoise: number.describe("per column, over the fibres' own medians"),
      medianElectrons: number.describe("per column, over all usable points"),
      shiftPixels: number.describe("of the light against the tramlines"),
      zeroPointPixels: number.describe("of the light along dispersion against the arc's; null when not measured"),
      rejectedPixels: count.nullable().describe("as cosmic rays"),
      usableShare: number,
      skyResidual: number.describe(
        "light left in sky fibres between lines when the others foretell them, as a share of the sky",
      ),
      skyPullBetweenLines: number.describe("its scatter over the expected one"),
      skyPullAtLines: number,
      warnings: z.array(z.string()),
    }),
  ),
  derived: z.array(product).describe("what was made of the spectra: combined, rebinned, tables"),
  failed: count.describe("products that could not be made"),
};
