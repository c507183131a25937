/** Bias, dark and pixel flat frames to detector.fits. */
import { basename } from "node:path";
import { writeDetector } from "../detector/detectorFile.js";
import { oneOfEach } from "../oneOfEach.js";
import { correctionLines, openCorrection } from "./correction.js";
import type { Facts, Job } from "./task.js";

export async function makeDetector(job: Job): Promise<Facts> {
  const { version } = job.options as { version: string };
  const { calibrations, inputs } = await openCorrection(job);
  // The frames themselves are told by the calibrations.
  const own = inputs.filter((input) => !calibrations.inputs.some((one) => one.name === input.name));
  await writeDetector(job.products[0], calibrations, { version, options: correctionLines(job), inputs: own });
  const stacks = (calibrations.stacks ?? []).map(({ role, frames }) => ({
    role,
    used: frames.filter(({ used }) => used).length,
    leftOut: frames.filter(({ used }) => !used).map(({ name }) => basename(name)),
  }));
  return { stacks, assumptions: oneOfEach(calibrations.assumptions), warnings: oneOfEach(calibrations.warnings) };
}
