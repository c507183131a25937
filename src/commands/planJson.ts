/** What `hatchel plan --json` prints. */
import { z } from "zod";

const names = z.array(z.string());

export const planKeys = {
  output: z.string(),
  folder: z.string(),
  spectrograph: z.string().nullable().describe("the spectrograph file that was found beside the frames"),
  badPixels: z.string().nullable().describe("the image of bad pixels that was found beside the frames"),
  frames: z
    .strictObject({ bias: names, dark: names, pixelFlat: names, fibreFlat: names, arc: names, twilight: names })
    .describe("calibration frames by role, in the order in which they were exposed"),
  objects: z.array(z.strictObject({ name: z.string(), frames: names })),
  left: z.array(z.strictObject({ name: z.string(), why: z.string() })).describe("frames without a role"),
};
