/** The options that commands share, with what their values may be. */
import { type Command, Option } from "commander";
import type { PrecisionChoice } from "../extraction/precision.js";
import { mostThreads } from "../kernels/module.js";
import type { Method } from "../reference/extract.js";
import type { ProfileKind } from "../tramlines/profiles.js";
import type { CommonOptions } from "./perform.js";
import { UsageError } from "./usage.js";

/** What a raw frame is corrected with. */
export interface FrameOptions extends CommonOptions {
  spectrograph?: string;
  bias?: string[];
  dark?: string[];
  pixelFlat?: string[];
  badPixels?: string;
  /** A file that 'hatchel stack' wrote, in place of the four. */
  detector?: string;
  hdu?: number;
}

/** Where the tramlines come from: one of the two. */
export interface TramlineOptions {
  flat?: string[];
  tramlines?: string;
  /** For flats that are traced on the way; tramlines have theirs. */
  profile?: ProfileKind | "auto";
  /** Extract a frame even when its light does not tell that its fibres are named rightly. */
  trustNames?: boolean;
}

/** How light is gathered. */
export interface MethodOptions {
  method: Method;
  crosstalk: boolean;
  precision: PrecisionChoice;
  cosmicRays: boolean;
  refine: boolean;
  halfAperture?: number;
}

export function addCommonOptions(command: Command): Command {
  return command
    .option("--json", "print one JSON object on standard output instead of the report")
    .option("--quiet", "say nothing but errors");
}

export function addFrameOptions(command: Command): Command {
  return addCalibrationOptions(
    command.option(
      "--detector <file>",
      "detector calibrations that 'hatchel stack' wrote, in place of the frames below",
    ),
  );
}

/** @throws UsageError for both a file of calibrations and frames to make some of. */
export function requireOneDetector({ detector, bias, dark, pixelFlat, badPixels }: FrameOptions): void {
  const frames = { "--bias": bias, "--dark": dark, "--pixel-flat": pixelFlat, "--bad-pixels": badPixels };
  const given = Object.entries(frames).find(([, files]) => files !== undefined)?.[0];
  if (detector === undefined || given === undefined) return;
  throw new UsageError(
    `hatchel: both --detector and ${given} are given; a file of 'hatchel stack' holds all calibrations: make it with ${given}, or leave it out.`,
  );
}

/** What makes detector calibrations. */
export function addCalibrationOptions(command: Command): Command {
  return command
    .option("--spectrograph <file>", "what is known of detector and slit, in TOML")
    .option("--bias <file...>", "bias frames, combined and taken off")
    .option("--dark <file...>", "dark frames, combined and taken off by the exposure's time")
    .option("--pixel-flat <file...>", "frames of an evenly lit detector, divided by")
    .option("--bad-pixels <file>", "image of the assembled frame, not 0 where a pixel is bad")
    .addOption(hduOption())
    .addOption(threadsOption());
}

export function threadsOption(): Option {
  const option = new Option("--threads <n>", "how many work at once; all cores unless told otherwise");
  return option.argParser(wholeNumber("--threads", 1, mostThreads));
}

export function hduOption(): Option {
  return new Option("--hdu <n>", "which HDU of the raw frames holds the image, from 0").argParser(wholeNumber("--hdu"));
}

export function addTramlineOptions(command: Command): Command {
  return command
    .option("--flat <file...>", "fibre flats to trace on the way")
    .option("--tramlines <file>", "tramlines that 'hatchel trace' wrote")
    .addOption(profileOption())
    .option(
      "--trust-names",
      "extract a frame even if its light does not tell that fibres are named rightly, one lower or one higher; only when nothing can have moved since the flat, since every spectrum would bear another fibre's number",
    );
}

/** What the tramlines' options come to for the extraction. */
export function namingOptions({ trustNames }: TramlineOptions): { checkNames?: boolean } {
  return trustNames === true ? { checkNames: false } : {};
}

export function profileOption(): Option {
  const kinds = ["auto", "gaussian", "hermite", "empirical"] as const;
  return new Option(
    "--profile <model>",
    "how light spreads across a tramline: auto, gaussian, hermite or empirical; auto takes what fits columns of the flat best that it was not made from (default: auto)",
  ).argParser(oneOf("--profile", kinds));
}

export function addMethodOptions(command: Command): Command {
  const methods: Method[] = ["joint", "optimal", "boxcar"];
  return addKernelOptions(
    command.addOption(
      new Option("--method <name>", "joint, optimal or boxcar").default("joint").argParser(oneOf("--method", methods)),
    ),
  ).addOption(
    new Option("--crosstalk <on|off>", "give back what optimal and boxcar let neighbours take; joint always does")
      .default(true, "on")
      .argParser(onOff("--crosstalk")),
  );
}

/** Those that hold for all methods alike. */
export function addKernelOptions(command: Command): Command {
  return command
    .addOption(
      new Option("--precision <type>", "numbers that the kernels reckon with: f32, f64, or auto, f32 where it serves")
        .default("auto")
        .argParser(oneOf<PrecisionChoice>("--precision", ["auto", "f32", "f64"])),
    )
    .addOption(
      new Option("--cosmic-rays <on|off>", "reject pixels hit by cosmic rays")
        .default(true, "on")
        .argParser(onOff("--cosmic-rays")),
    )
    .addOption(refineOption())
    .addOption(
      new Option("--half-aperture <px>", "half of the boxcar's width (default: half of the smallest pitch)").argParser(
        positive("--half-aperture"),
      ),
    );
}

export function refineOption(): Option {
  return new Option("--refine <on|off>", "refine a measured profile on the frame's own light; off is quicker")
    .default(true, "on")
    .argParser(onOff("--refine"));
}

export function outputOption(product: string, standardOutput = true): Option {
  const dash = standardOutput ? "; - is standard output" : "";
  return new Option("-o, --output <file>", `where the ${product} go${dash}`);
}

export function forceOption(): Option {
  return new Option("--force", "replace files that are there already");
}

/** Options that the method would pass over in silence.
 * @throws UsageError */
export function requireFittingMethod(command: string, { method, crosstalk, halfAperture }: MethodOptions): void {
  if (method === "joint" && !crosstalk) {
    throw new UsageError(
      `hatchel ${command}: --crosstalk off, but joint always parts neighbours' light; choose --method optimal or boxcar with it.`,
    );
  }
  if (method !== "boxcar" && halfAperture !== undefined) {
    throw new UsageError(
      `hatchel ${command}: --half-aperture is the boxcar's, but the method is ${method}; choose --method boxcar with it.`,
    );
  }
}

/** The methods' options as the lines that a product's HISTORY keeps. */
export function methodLines(options: MethodOptions): string[] {
  const lines = [`method ${options.method}`];
  if (options.method !== "joint") lines.push(`crosstalk ${onOrOff(options.crosstalk)}`);
  lines.push(`precision ${options.precision}`, `cosmic-rays ${onOrOff(options.cosmicRays)}`);
  lines.push(`refine ${onOrOff(options.refine)}`);
  if (options.halfAperture !== undefined) lines.push(`half-aperture ${options.halfAperture}`);
  return lines;
}

export function onOrOff(value: boolean): string {
  return value ? "on" : "off";
}

function onOff(option: string): (text: string) => boolean {
  const parse = oneOf(option, ["on", "off"]);
  return (text) => parse(text) === "on";
}

function oneOf<T extends string>(option: string, known: readonly T[]): (text: string) => T {
  return (text) => {
    if ((known as readonly string[]).includes(text)) return text as T;
    const choice = `${known.slice(0, -1).join(", ")} or ${known[known.length - 1]}`;
    throw new UsageError(`hatchel: ${option} is '${text}'; it must be ${choice}.`);
  };
}

function positive(option: string): (text: string) => number {
  return (text) => {
    const value = Number(text);
    if (text.trim() !== "" && Number.isFinite(value) && value > 0) return value;
    throw new UsageError(`hatchel: ${option} is '${text}'; it must be a number of pixels over 0.`);
  };
}

function wholeNumber(option: string, least = 0, most = 999_999): (text: string) => number {
  return (text) => {
    if (/^\d{1,6}$/.test(text) && Number(text) >= least && Number(text) <= most) return Number(text);
    const range = most === 999_999 ? `${least} or more` : `${least} to ${most}`;
    throw new UsageError(`hatchel: ${option} is '${text}'; it must be a whole number, ${range}.`);
  };
}
