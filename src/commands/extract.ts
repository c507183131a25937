/** hatchel extract: a frame to spectra. */
import type { Command } from "commander";
import type { Frame } from "../detector/frame.js";
import { type Extraction, extractFrame } from "../extraction/extract.js";
import { writeSpectra } from "../extraction/file.js";
import { medianSignalToNoise } from "../extraction/snr.js";
import { imageBytes } from "../kernels/extractionMemory.js";
import { countFibres, type SpectraSummary, summariseSpectra } from "../report/summary.js";
import type { Shift } from "../tramlines/shift.js";
import {
  addCalibrateOptions,
  type CalibrateOptions,
  calibrateExtraction,
  calibrateLines,
  calibratePaths,
  calibrationAssumptions,
  calibrationFacts,
  calibrationJson,
  calibrationOf,
  requireFittingCalibration,
  requireSkyFibres,
} from "./calibrateOptions.js";
import {
  addExtraOptions,
  type ExtraOptions,
  extraLines,
  extraPaths,
  extrasFacts,
  extrasJson,
  measureExtras,
  pairHits,
  requireFittingExtras,
} from "./extractExtras.js";
import {
  addCommonOptions,
  addFrameOptions,
  addMethodOptions,
  addTramlineOptions,
  type FrameOptions,
  forceOption,
  type MethodOptions,
  methodLines,
  namingOptions,
  onOrOff,
  outputOption,
  requireFittingMethod,
  type TramlineOptions,
} from "./frameOptions.js";
import {
  frameLines,
  givenTramlines,
  inputPaths,
  oneOfEach,
  openBench,
  readFrame,
  requireAperture,
  requireTramlineSource,
  type Traced,
  tramlinesFor,
} from "./frames.js";
import { checkOutput, uninterrupted } from "./output.js";
import { type Outcome, perform } from "./perform.js";
import type { Progress } from "./progress.js";
import { counted, fixed, percentage, textPairs } from "./textTable.js";
import { fibresText, tracingFacts, tracingJson } from "./trace.js";
import { version } from "./version.js";

interface ExtractOptions extends FrameOptions, TramlineOptions, MethodOptions, ExtraOptions, CalibrateOptions {
  output: string;
  force?: boolean;
}

export function addExtract(command: Command): void {
  command
    .description("Extracts one spectrum per fibre, with its variance, from a raw frame.")
    .argument("<FRAME>", "the raw frame; - is standard input")
    .addOption(outputOption("spectra").makeOptionMandatory());
  addTramlineOptions(command);
  addCalibrateOptions(addExtraOptions(addMethodOptions(command))).addOption(forceOption());
  addCommonOptions(addFrameOptions(command)).action((frame: string, options: ExtractOptions) =>
    perform("extract", options, (progress) => extract(frame, options, progress)),
  );
}

async function extract(path: string, options: ExtractOptions, progress: Progress): Promise<Outcome<"extract">> {
  requireTramlineSource("extract", options);
  requireFittingMethod("extract", options);
  requireFittingExtras(options);
  requireFittingCalibration(options);
  const { output, force } = options;
  const paths = inputPaths([path, ...extraPaths(options), ...calibratePaths(options)], options);
  checkOutput(output, { force, inputs: paths });
  const bench = await openBench(paths, options, progress);
  requireSkyFibres(options, bench);
  const given = await givenTramlines(options);
  const frame = await readFrame(path, "science", bench, given && imageBytes(given.nx, given.ny, given.nFibre));
  const traced = await tramlinesFor(frame, options, bench, progress, given);
  requireAperture(options.halfAperture, traced);
  const pair = await pairHits(frame, traced.tramlines, options, bench, progress);
  progress.stage(`extracting ${frame.name}`);
  const raw = await extractFrame(frame, traced.tramlines, {
    ...{ ...extractionOptions(options), ...namingOptions(options) },
    ...(pair === undefined ? {} : { knownHits: pair.hits }),
    onProgress: progress.share,
  });
  const calibrated = await calibrateExtraction(frame, raw, options, bench, progress);
  const extraction = calibrated === undefined ? raw : { ...raw, spectra: calibrated.spectra };
  const { hdus, calibration } = calibrationOf(calibrated);
  const extras = await measureExtras(frame, traced.tramlines, extraction, options, bench, progress);
  const signalToNoise = medianSignalToNoise(extraction.spectra);
  const history = {
    signalToNoise,
    ...{ version, inputs: bench.inputs, sky: bench.spectrograph?.slit?.sky, calibration },
    extra: [...hdus, ...extras.hdus],
    options: [
      ...methodLines({ ...options, precision: extraction.precision }),
      ...frameLines(options),
      ...extraLines(options),
      ...calibrateLines(options),
    ],
  };
  await uninterrupted(() =>
    writeSpectra(output, extraction, frame, traced.tramlines, history, { force: force === true, inputs: paths }),
  );
  const summary = summariseSpectra(extraction.spectra, traced.tramlines, signalToNoise);
  const { assumptions, warnings } = notes(frame, traced, extraction, summary);
  assumptions.push(...calibrationAssumptions(calibrated, frame.name));
  const said = [
    ...facts(traced, extraction, summary, options),
    ...extrasFacts(pair, extras),
    ...calibrationFacts(calibrated),
  ];
  return {
    json: {
      output,
      ...extractJson(frame, traced, extraction, summary, options),
      ...extrasJson(pair, extras),
      calibration: calibrationJson(calibrated),
      assumptions,
      warnings: oneOfEach([
        ...warnings,
        ...(pair?.warnings ?? []),
        ...extras.warnings,
        ...(calibrated?.warnings ?? []),
      ]),
    },
    text: `${output === "-" ? "standard output" : output}: spectra of ${frame.name}\n${textPairs(said)}`,
  };
}

/** The method's options as the library takes them. */
export function extractionOptions({ method, crosstalk, precision, cosmicRays, refine, halfAperture }: MethodOptions) {
  return { method, crosstalk, precision, cosmicRays, refine, ...(halfAperture === undefined ? {} : { halfAperture }) };
}

function notes(frame: Frame, traced: Traced, extraction: Extraction, { nUsable, nPoint }: SpectraSummary) {
  const share = nUsable / nPoint;
  const few = `${frame.name}: only ${percentage(share)} of the spectrum points can be trusted; their flags tell why.`;
  return {
    assumptions: oneOfEach([...frame.assumptions, ...traced.assumptions]),
    warnings: oneOfEach([...frame.warnings, ...traced.warnings, ...extraction.warnings, ...(share < 0.5 ? [few] : [])]),
  };
}

function extractJson(
  frame: Frame,
  traced: Traced,
  extraction: Extraction,
  summary: SpectraSummary,
  options: ExtractOptions,
) {
  const { tramlines, tracing } = traced;
  return {
    frame: frame.name,
    method: extraction.spectra.method,
    crosstalkCorrected: extraction.spectra.crosstalkCorrected,
    precision: extraction.precision,
    cosmicRays: options.cosmicRays,
    tracing: tracing === undefined ? null : tracingJson(tracing),
    fibres: countFibres(tramlines),
    columns: extraction.spectra.nx,
    shift: shiftJson(extraction.shift),
    profileError: extraction.profileError,
    refinedProfile: extraction.refined,
    rejectedPixels: extraction.nRejected,
    backgroundErrorElectrons: extraction.background?.error ?? null,
    points: summary.nPoint,
    usablePoints: summary.nUsable,
    flags: summary.flags,
    signalToNoise: summary.signalToNoise,
    spectra: Array.from(tramlines.fibre, (fibre, k) => ({
      fibre,
      state: tramlines.state[k],
      block: tramlines.block[k],
      medianSignalToNoise: summary.fibreSignalToNoise[k],
      usableShare: summary.fibreUsableShare[k],
    })),
  };
}

function shiftJson(shift: Shift | null) {
  if (shift === null) return null;
  const [pixels, alongDispersion, alongSlit] = shift.coefficients;
  return { pixels, error: shift.errors[0], alongDispersion, alongSlit, rmsPixels: shift.rms };
}

function facts(
  { tramlines, tracing }: Traced,
  extraction: Extraction,
  summary: SpectraSummary,
  options: ExtractOptions,
): [string, string][] {
  const { method } = extraction.spectra;
  const crosstalk = method === "joint" ? "" : `, cross-talk correction ${onOrOff(options.crosstalk)}`;
  const raised = Object.entries(summary.flags).filter(([, n]) => n > 0);
  const { faintest, median, brightest } = summary.signalToNoise;
  return [
    ...(tracing === undefined
      ? ([["fibres", fibresText(countFibres(tramlines))]] as [string, string][])
      : tracingFacts(tracing)),
    ["shift", shiftText(extraction.shift)],
    ["method", `${method}${crosstalk}, ${extraction.precision}`],
    ["cosmic rays", options.cosmicRays ? `${counted(extraction.nRejected, "pixel")} rejected` : "not looked for"],
    ["usable points", `${summary.nUsable} of ${summary.nPoint} (${percentage(summary.nUsable / summary.nPoint, 2)})`],
    ["flags", raised.length === 0 ? "none" : raised.map(([name, n]) => `${flagWords(name)} ${n}`).join(", ")],
    [
      "median S/N",
      `${fixed(median, 1)} per pixel (faintest fibre ${fixed(faintest, 1)}, brightest ${fixed(brightest, 1)})`,
    ],
  ];
}

function shiftText(shift: Shift | null): string {
  if (shift === null) return "not measurable, none applied";
  const [middle, alongDispersion, alongSlit] = shift.coefficients;
  const ends = `${fixed(alongDispersion, 4)} px to the last column, ${fixed(alongSlit, 4)} px to the last row`;
  return `${fixed(middle, 4)} ± ${fixed(shift.errors[0], 4)} px against the tramlines, changing by ${ends}; applied`;
}

/** weightLost → weight lost */
function flagWords(name: string): string {
  return name.replace(/[A-Z]/g, (letter) => ` ${letter.toLowerCase()}`);
}
