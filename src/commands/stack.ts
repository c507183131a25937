/** hatchel stack: bias, dark and pixel flat frames to one file of detector calibrations. */
import type { Command } from "commander";
import { badPixelNumbers } from "../detector/badpixels.js";
import type { Calibrations, StackReport } from "../detector/calibrations.js";
import { writeDetector } from "../detector/detectorFile.js";
import { type AmplifierNoise, measureNoise } from "../detector/noise.js";
import { readImage } from "../fits/image.js";
import {
  addCalibrationOptions,
  addCommonOptions,
  type FrameOptions,
  forceOption,
  outputOption,
} from "./frameOptions.js";
import { type Bench, frameLines, inputPaths, oneOfEach, openBench } from "./frames.js";
import { checkOutput, uninterrupted } from "./output.js";
import { type Outcome, perform } from "./perform.js";
import type { Progress } from "./progress.js";
import { counted, fixed, percentage, textPairs, textTable } from "./textTable.js";
import { UsageError } from "./usage.js";
import { version } from "./version.js";

interface StackOptions extends Omit<FrameOptions, "detector"> {
  output: string;
  force?: boolean;
}

export function addStack(command: Command): void {
  command
    .description(
      "Combines any number of bias, dark and pixel flat frames into one file, which --detector takes in their place. Frames that are unlike the others of their kind are left out and named.",
    )
    .addOption(outputOption("calibrations").makeOptionMandatory())
    .addOption(forceOption());
  addCommonOptions(addCalibrationOptions(command)).action((options: StackOptions) =>
    perform("stack", options, (progress) => stack(options, progress)),
  );
}

async function stack(options: StackOptions, progress: Progress): Promise<Outcome<"stack">> {
  const { bias, dark, pixelFlat, output, force } = options;
  if (bias === undefined && dark === undefined && pixelFlat === undefined) {
    throw new UsageError("hatchel stack: no frames are given; name some with --bias, --dark or --pixel-flat.");
  }
  const inputs = inputPaths([], options);
  checkOutput(output, { force, inputs });
  const bench = await openBench(inputs, options, progress);
  const { calibrations } = bench;
  progress.stage("measuring gain and read noise");
  const amplifiers = await measuredNoise(options, bench);
  const own = bench.inputs.filter((input) => !calibrations.inputs.some((one) => one.name === input.name));
  const file = { version, options: frameLines(options), inputs: own };
  await uninterrupted(() => writeDetector(output, calibrations, file, { force, inputs }));
  return {
    json: { output, ...stackJson(calibrations, amplifiers), warnings: oneOfEach(calibrations.warnings) },
    text: page(output, calibrations, amplifiers),
  };
}

/** From the first two bias frames and pixel flats that were used. */
async function measuredNoise(options: StackOptions, { calibrations, spectrograph }: Bench): Promise<AmplifierNoise[]> {
  const { zeroLevelAdu } = calibrations;
  const read = async (role: StackReport["role"], paths: string[] = []) => {
    const frames = calibrations.stacks?.find((one) => one.role === role)?.frames ?? [];
    const used = paths.filter((path, i) => path !== "-" && frames[i]?.used);
    return Promise.all(used.slice(0, 2).map((path) => readImage(path, { hdu: options.hdu })));
  };
  const [bias, flats] = [await read("bias", options.bias), await read("pixel flat", options.pixelFlat)];
  if (bias.length + flats.length === 0) return [];
  return measureNoise({ bias, flats, ...(zeroLevelAdu ? { zeroLevelAdu } : {}) }, spectrograph).amplifiers;
}

function stackJson(made: Calibrations, amplifiers: AmplifierNoise[]) {
  const { digest, axis1, axis2, dispersionAxis } = made.geometry!;
  return {
    geometry: { digest, size: [axis1, axis2] as [number, number], dispersionAxis },
    roles: (made.stacks ?? []).map(({ role, frames, level, noise }) => ({
      role,
      frames: frames.map((frame) => ({
        ...{ name: frame.name, used: frame.used, reason: frame.reason ?? null },
        ...{ levelElectrons: frame.level, noiseElectrons: frame.noise, clippedShare: frame.clippedShare },
      })),
      ...{ used: frames.filter(({ used }) => used).length, leftOut: frames.filter(({ used }) => !used).length },
      ...{ level, noise, unusableShare: unusableShare(made, role) },
    })),
    amplifiers: amplifiers.map((one) => ({
      ...{ amplifier: one.amplifier, givenGain: one.givenGain, gain: one.gain ?? null },
      ...{ givenReadNoise: one.givenReadNoise, readNoise: one.readNoise ?? null },
      readNoiseFrom: one.readNoiseFrom ?? null,
    })),
    badPixels: made.badPixels === undefined ? null : badPixelNumbers(made.badPixels).length,
    assumptions: oneOfEach(made.assumptions),
  };
}

function unusableShare({ bias, dark, response }: Calibrations, role: StackReport["role"]): number {
  let n = 0;
  if (role === "pixel flat") {
    for (const unusable of response!.unusable) n += unusable;
    return n / response!.unusable.length;
  }
  const image = role === "bias" ? bias!.mean : dark!.rate;
  for (const value of image) if (Number.isNaN(value)) n++;
  return n / image.length;
}

const UNITS = { bias: "e⁻", dark: "e⁻/s", "pixel flat": "of their level" };

function page(output: string, made: Calibrations, amplifiers: AmplifierNoise[]): string {
  const facts = (made.stacks ?? []).map(({ role, frames, level, noise }): [string, string] => {
    const used = frames.filter((frame) => frame.used);
    const clipped = Math.max(...used.map(({ clippedShare }) => clippedShare));
    const left = frames.length > used.length ? `, ${frames.length - used.length} left out` : "";
    return [
      role,
      `${counted(used.length, "frame")}${left}; median ${Number(level.toPrecision(4))} ± ${Number(noise.toPrecision(2))} ${UNITS[role]} a pixel, at most ${percentage(clipped, 2)} of a frame clipped`,
    ];
  });
  if (made.badPixels) facts.push(["bad pixels", counted(badPixelNumbers(made.badPixels).length, "pixel")]);
  const heading = `${output === "-" ? "standard output" : output}: detector calibrations`;
  return [heading, textPairs(facts), ...amplifierLines(amplifiers)].join("\n");
}

function amplifierLines(amplifiers: AmplifierNoise[]): string[] {
  if (amplifiers.length === 0) return [];
  const shown = (one: { value: number; error: number } | undefined) =>
    one === undefined ? "–" : `${fixed(one.value, 3)} ± ${fixed(one.error, 3)}`;
  const rows = amplifiers.map(({ amplifier, givenGain, gain, givenReadNoise, readNoise }) => [
    ...[String(amplifier), fixed(givenGain, 3), shown(gain), fixed(givenReadNoise, 2), shown(readNoise)],
  ]);
  return [textTable([["amplifier", "gain e⁻/ADU", "measured", "read noise e⁻", "measured"], ...rows])];
}
