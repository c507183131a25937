/** hatchel combine: frames of one field to one set of spectra. */
import { existsSync } from "node:fs";
import { type Command, Option } from "commander";
import { combinedHdus } from "../calibration/combineFile.js";
import { type CombinedSpectra, combineSpectra } from "../calibration/combineSpectra.js";
import { positionColumn, readProduct, type SpectraProduct } from "../calibration/spectraProduct.js";
import { medianSignalToNoise } from "../extraction/snr.js";
import { sumFibres, type Target } from "../extraction/targets.js";
import { FitsError } from "../fits/errors.js";
import { writeFits } from "../fits/write.js";
import { median } from "../reference/median.js";
import { summariseSpectra } from "../report/summary.js";
import { readSpectrograph } from "../spectrograph.js";
import type { FibreState } from "../tramlines/tramlines.js";
import { RefusalError } from "./failures.js";
import { addCommonOptions, forceOption, onOrOff, outputOption } from "./frameOptions.js";
import { checkOutput, uninterrupted } from "./output.js";
import { type CommonOptions, type Outcome, perform } from "./perform.js";
import type { Progress } from "./progress.js";
import { counted, fixed, percentage, textPairs, textTable } from "./textTable.js";
import { UsageError } from "./usage.js";
import { version } from "./version.js";

interface CombineCommandOptions extends CommonOptions {
  output: string;
  force?: boolean;
  spectrograph?: string;
  cosmicRays: boolean;
  tolerance: number;
  trustField?: boolean;
}

export function addCombine(command: Command): void {
  command
    .description(
      "Combines spectra of several frames of one field: outliers out, each frame weighed by what it knows, all on the scale of the first frame's exposure. Take the sky off before: its brightness does not follow the transparency.",
    )
    .argument("<SPECTRA...>", "spectra that 'hatchel extract' wrote, of the same fibres and the same field")
    .addOption(outputOption("combined spectra").makeOptionMandatory())
    .option("--spectrograph <file>", "its slit.targets are summed (default: the targets of the first file)")
    .addOption(
      new Option("--cosmic-rays <on|off>", "leave out values that the other frames do not bear out")
        .default(true, "on")
        .argParser((text) => {
          if (text === "on" || text === "off") return text === "on";
          throw new UsageError(`hatchel: --cosmic-rays is '${text}'; it must be on or off.`);
        }),
    )
    .addOption(
      new Option(
        "--tolerance <px>",
        "combine column by column while wavelengths differ by no more than this; beyond, light is moved to the first frame's columns and neighbours share noise",
      )
        .default(0.05)
        .argParser((text) => {
          const value = Number(text);
          if (text.trim() !== "" && value >= 0) return value;
          throw new UsageError(`hatchel: --tolerance is '${text}'; it must be a number of pixels, 0 or more.`);
        }),
    )
    .option(
      "--trust-field",
      "combine frames whose fibres' light does not agree; only when they are of one field for certain, since the sum of two fields is neither",
    )
    .addOption(forceOption());
  addCommonOptions(command).action((paths: string[], options: CombineCommandOptions) =>
    perform("combine", options, (progress) => combine(paths, options, progress)),
  );
}

async function combine(
  paths: string[],
  options: CombineCommandOptions,
  progress: Progress,
): Promise<Outcome<"combine">> {
  const { output, force, cosmicRays, tolerance, trustField } = options;
  if (paths.includes("-")) {
    throw new UsageError("hatchel combine: - is standard input, which holds one file; name the files.");
  }
  const inputs = [...paths, ...(options.spectrograph === undefined ? [] : [options.spectrograph])];
  const missing = inputs.find((path) => !existsSync(path));
  if (missing !== undefined) {
    throw new FitsError("unreadable", "there is no such file", "check the name", { file: missing });
  }
  checkOutput(output, { force, inputs });
  const targets = options.spectrograph && (await readSpectrograph(options.spectrograph)).slit?.targets;
  const products: SpectraProduct[] = [];
  for (const path of paths) {
    progress.stage(`reading ${path}`);
    products.push(await readProduct(path));
  }
  progress.stage(`combining ${counted(products.length, "frame")}`);
  const combined = combineSpectra(products, { cosmicRays, tolerance, ...(trustField ? { trustField } : {}) });
  const history = {
    version,
    options: [
      `cosmic-rays ${onOrOff(cosmicRays)}`,
      `tolerance ${tolerance}`,
      ...(trustField === true ? ["trust-field"] : []),
    ],
    inputs: products.map(({ name, checksum }) => ({ name, checksum })),
  };
  const wanted = targets || products[0].targets.map(({ target }) => target);
  const hdus = refusing(() => combinedHdus(products, combined, history, wanted));
  await uninterrupted(() => writeFits(output, hdus, { force, inputs }));
  const json = {
    output,
    ...figures(products[0], combined, wanted),
    assumptions: assumptions(products[0]),
    warnings: combined.warnings,
  };
  return { json, text: page(json) };
}

/** A target outside the slit is the spectrograph file's fault. */
function refusing<T>(work: () => T): T {
  try {
    return work();
  } catch (error) {
    if (error instanceof RangeError && /^Target/.test(error.message)) throw new RefusalError(error.message);
    throw error;
  }
}

function assumptions({ sky }: SpectraProduct): string[] {
  if (sky !== undefined) return [];
  return [
    "the spectra hold no sky that was taken off (HDU SKY), so that sky light, if there is some, takes part in the frames' scales.",
  ];
}

function figures(first: SpectraProduct, combined: CombinedSpectra, targets: Target[]) {
  const { spectra, frames, nFrames } = combined;
  const state = Array.from(
    { length: spectra.nFibre },
    (_, k) => String(positionColumn(first, "STATE")?.[k] ?? "lit").trim() as FibreState,
  );
  const summary = summariseSpectra(spectra, { state });
  const sums = sumFibres(spectra, targets);
  const nUsed = frames.reduce((sum, { usableShare }) => sum + usableShare * nFrames.length, 0);
  const nKept = nFrames.reduce((sum, n) => sum + n, 0);
  return {
    reference: first.name,
    frames: frames.map((frame) => ({
      ...{ name: frame.name, exposureSeconds: frame.exposureSeconds, scale: frame.scale, error: frame.error },
      ...{ scaleFrom: frame.from, fibreScatter: frame.scatter, weight: frame.weight },
      ...{ rejectedShare: frame.rejectedShare, usableShare: frame.usableShare },
      ...{ apartPixels: frame.apart, moved: frame.moved },
      ...{ lineShiftPixels: frame.lineShift, lineShiftError: frame.lineShiftError },
    })),
    points: summary.nPoint,
    usablePoints: summary.nUsable,
    rejectedValues: Math.round(nUsed) - nKept,
    medianChi2: median(Array.from(spectra.chi2).filter((value) => Number.isFinite(value))),
    signalToNoise: summary.signalToNoise,
    targets: targets.map(({ name, fibres }, i) => {
      const [from, to] = [i * spectra.nx, (i + 1) * spectra.nx];
      const own = { ...spectra, nFibre: 1, flux: sums.flux.slice(from, to), variance: sums.variance.slice(from, to) };
      const [snr] = medianSignalToNoise({ ...own, flags: sums.flags.slice(from, to) });
      return { name, fibres, medianSignalToNoise: snr };
    }),
  };
}

const HEADING = ["frame", "scale", "±", "fibres ±", "weight", "rejected", "apart px", "lines px", "±"];

function page(json: Outcome<"combine">["json"]): string {
  const { frames, signalToNoise } = json;
  const rows = frames.map((frame) => [
    `${frame.name}${frame.moved ? " (moved)" : ""}`,
    fixed(frame.scale, 4),
    fixed(frame.error, 4),
    percentage(frame.fibreScatter, 1),
    percentage(frame.weight, 1),
    percentage(frame.rejectedShare, 2),
    fixed(frame.apartPixels, 3),
    fixed(frame.lineShiftPixels, 3),
    fixed(frame.lineShiftError, 3),
  ]);
  const facts: [string, string][] = [
    ["usable points", `${json.usablePoints} of ${json.points} (${percentage(json.usablePoints / json.points, 2)})`],
    ["outliers", `${counted(json.rejectedValues, "value")} of single frames left out`],
    ["χ² of the frames", `${fixed(json.medianChi2, 2)} about their mean, median of the points`],
    [
      "median S/N",
      `${fixed(signalToNoise.median, 1)} per pixel (faintest fibre ${fixed(signalToNoise.faintest, 1)}, brightest ${fixed(signalToNoise.brightest, 1)})`,
    ],
    ...json.targets.map(({ name, fibres, medianSignalToNoise: snr }): [string, string] => [
      `target ${name}`,
      `${counted(fibres.length, "fibre")}, median S/N ${fixed(snr, 1)}`,
    ]),
  ];
  const to = json.output === "-" ? "standard output" : json.output;
  return `${to}: ${counted(frames.length, "frame")} on the exposure of ${json.reference}\n${textTable([HEADING, ...rows])}\n${textPairs(facts)}`;
}
