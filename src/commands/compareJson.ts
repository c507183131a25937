/** What compare prints beside its methods' table. */
import { z } from "zod";

const number = z.number().nullable();
const count = z.int().min(0);
const method = z.enum(["joint", "optimal", "boxcar"]);
const which = { method, crosstalkCorrected: z.boolean() };

export const gainKeys = {
  expectedExposure: number.describe("what profile and model variances let equivalentExposure be"),
  seenExposure: number.describe("the same from scatter along the spectra, in fibres in which noise rules"),
  promisedExposure: number.describe("what the error bars promise for those fibres"),
};

export const comparisonKeys = {
  theory: z
    .strictObject({
      halfAperturePixels: number,
      noiseEquivalentWidth: number.describe("1 / sum of squared weights, pixels"),
      caughtShare: number.describe("of a fibre's light within the aperture"),
      backgroundLimited: number,
      photonLimited: number,
    })
    .describe("exposure that a boxcar needs over weighting's, for a fibre alone; the S/N's gain is the square root"),
  leaks: z
    .array(
      z.strictObject({
        bright: count,
        fibre: count,
        ...which,
        share: number.describe("sum of (flux - joint's) at the fibre over the bright one's"),
        error: number,
        model: number.describe("the bright fibre's part from the profile model"),
        modelOfAll: number.describe("with all other neighbours' light, which share holds too"),
      }),
    )
    .describe("into the neighbours of the brightest fibres; positions count from 1"),
  agreement: z
    .array(
      z.strictObject({
        ...which,
        levels: z.array(
          z.strictObject({
            from: number.describe("joint's flux, e-; null for no bound"),
            to: number,
            nPoint: count,
            median: number.describe("of (flux - joint's) / sigma of that difference"),
            spread: number.describe("robust standard deviation of the same; 1 for noise alone"),
            medianInErrorBars: number.describe("of (flux - joint's) / joint's sigma"),
          }),
        ),
      }),
    )
    .describe("with joint; no levels where a method is joint by another way"),
  recommended: z
    .strictObject({ method: method.nullable(), reason: z.string() })
    .describe("for all fibres of the frame"),
  fibres: z
    .array(
      z.strictObject({
        fibre: count,
        method: method.nullable().describe("the least demanding that serves it; optimal and boxcar uncorrected"),
        reason: z.string(),
        gain: number.describe("exposure that a corrected boxcar needs over joint's"),
        takenShare: number.describe("neighbours' light in an uncorrected boxcar over the fibre's own"),
        from: count.nullable().describe("the neighbour that gives most"),
        fromShare: number.describe("share of that neighbour's light"),
        chi2: number,
      }),
    )
    .describe("one for each slit position"),
};
