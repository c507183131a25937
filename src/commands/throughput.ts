/** hatchel throughput: twilight or fibre flats to what each fibre passes on. */
import { basename } from "node:path";
import type { Command } from "commander";
import { requireReadout } from "../calibration/calibrate.js";
import { measureThroughput, type Throughput } from "../calibration/throughput.js";
import { fibreLevels, writeThroughput } from "../calibration/throughputFile.js";
import { combineThroughputs, levelScatter, withLevels } from "../calibration/throughputSet.js";
import { readWavelengths } from "../calibration/wavelengthFile.js";
import { wavelengthImage } from "../calibration/wavelengths.js";
import { medianOf } from "../detector/clip.js";
import { extractFrame } from "../extraction/extract.js";
import type { Header } from "../fits/header.js";
import { checkGeometry } from "../tramlines/file.js";
import {
  addCommonOptions,
  addFrameOptions,
  addTramlineOptions,
  type FrameOptions,
  forceOption,
  namingOptions,
  outputOption,
  type TramlineOptions,
} from "./frameOptions.js";
import {
  fileInputs,
  frameLines,
  inputPaths,
  oneOfEach,
  openBench,
  readFrame,
  requireTramlineSource,
  type TracedFor,
  tramlinesFor,
} from "./frames.js";
import { checkOutput, uninterrupted } from "./output.js";
import { type Outcome, perform } from "./perform.js";
import type { Progress } from "./progress.js";
import { counted, percentage, ranges, textPairs } from "./textTable.js";
import { version } from "./version.js";

interface ThroughputOptions extends FrameOptions, TramlineOptions {
  wavelengths: string;
  shape?: string[];
  output: string;
  force?: boolean;
}

/** Of the median fibre. */
const WEAK = 0.2;
/** Frames whose levels differ by more were not lit alike. */
const MOST_SCATTER = 0.01;

interface Measured {
  frame: string;
  throughput: Throughput;
}

export function addThroughput(command: Command): void {
  command
    .description(
      "Measures what each fibre passes on, relative to the others, from twilight or fibre flats. Twilight lights the fibres as the sky does; a lamp may not.",
    )
    .argument("<FRAME...>", "raw twilight or fibre-flat frames of one readout window; - is standard input")
    .addOption(outputOption("throughput").makeOptionMandatory())
    .requiredOption("--wavelengths <file>", "wavelengths that 'hatchel arc' wrote")
    .option("--shape <file...>", "fibre flats to take the shape along x from, and only the levels from the frames")
    .addOption(forceOption());
  addTramlineOptions(command);
  addCommonOptions(addFrameOptions(command)).action((frames: string[], options: ThroughputOptions) =>
    perform("throughput", options, (progress) => throughput(frames, options, progress)),
  );
}

async function throughput(
  frames: string[],
  options: ThroughputOptions,
  progress: Progress,
): Promise<Outcome<"throughput">> {
  requireTramlineSource("throughput", options);
  const { output, force, wavelengths, shape = [] } = options;
  const inputs = inputPaths([...frames, ...shape, wavelengths], options);
  checkOutput(output, { force, inputs });
  const bench = await openBench(inputs, options, progress);
  const solution = await readWavelengths(wavelengths);
  const notes = { assumptions: [] as string[], warnings: [] as string[] };
  let header: Header | undefined;
  let traced: TracedFor | undefined;
  const measure = async (path: string): Promise<Measured> => {
    const frame = await readFrame(path, "fibre flat", bench);
    header ??= frame.header;
    if (traced === undefined) traced = await tramlinesFor(frame, options, bench, progress);
    else checkGeometry(frame, traced.tramlines);
    progress.stage(`extracting ${frame.name}`);
    const extraction = await extractFrame(frame, traced.tramlines, namingOptions(options));
    notes.assumptions.push(...frame.assumptions, ...traced.assumptions);
    notes.warnings.push(...frame.warnings, ...traced.warnings, ...extraction.warnings);
    const digest = frame.geometry.digest;
    requireReadout(frame.name, extraction.spectra, digest, "wavelengths", solution, "reduce an arc");
    progress.stage(`measuring throughput on ${frame.name}`);
    return {
      frame: frame.name,
      throughput: measureThroughput(extraction.spectra, wavelengthImage(solution), digest, frame.name),
    };
  };
  const measured: Measured[] = [];
  for (const path of frames) measured.push(await measure(path));
  const shapes: Measured[] = [];
  for (const path of shape) shapes.push(await measure(path));
  bench.inputs.push(...fileInputs(wavelengths));
  const levels = combineThroughputs(measured.map((one) => one.throughput));
  const result =
    shapes.length === 0 ? levels : withLevels(combineThroughputs(shapes.map((one) => one.throughput)), levels);
  const file = {
    version,
    options: [
      ...frameLines(options),
      `wavelengths ${basename(wavelengths)}`,
      ...frames.map((path) => `frame ${basename(path)}`),
      ...shape.map((path) => `shape ${basename(path)}`),
    ],
    inputs: bench.inputs,
    header,
  };
  await uninterrupted(() => writeThroughput(output, result, file, { force, inputs }));
  const json = summary(result, levels, measured, shapes);
  return {
    json: {
      output,
      ...json,
      assumptions: oneOfEach(notes.assumptions),
      warnings: [...oneOfEach(notes.warnings), ...warningsOf(json)],
    },
    text: `${output === "-" ? "standard output" : output}: relative throughput\n${textPairs(facts(result, json))}`,
  };
}

function summary(result: Throughput, levels: Throughput, measured: Measured[], shapes: Measured[]) {
  const fibres = Array.from(fibreLevels(result));
  return {
    frames: measured.map(({ frame, throughput: own }) => ({ frame, levelScatter: levelScatter(own, levels) })),
    shapeFrames: shapes.map(({ frame }) => frame),
    medianError: medianOf(result.variance.map((v, i) => Math.sqrt(v) / result.relative[i])),
    levels: fibres.map((level, k) => ({ fibre: k + 1, throughput: level })),
    weakFibres: fibres.flatMap((level, k) => (level < WEAK ? [k + 1] : [])),
  };
}

function warningsOf({ frames, weakFibres }: ReturnType<typeof summary>): string[] {
  const apart = frames.filter((one) => one.levelScatter > MOST_SCATTER);
  return [
    ...apart.map(
      ({ frame, levelScatter: scatter }) =>
        `${frame}: its fibres' levels differ from those of all frames by ${percentage(scatter)} rms; the frames were not lit alike.`,
    ),
    ...(weakFibres.length === 0
      ? []
      : [
          `Fibres ${ranges(weakFibres)} pass on less than ${WEAK} of the median fibre's light; their spectra are divided by that, errors included: are they broken, or misplaced?`,
        ]),
  ];
}

function facts(result: Throughput, json: ReturnType<typeof summary>): [string, string][] {
  const known = json.levels
    .filter(({ throughput: level }) => Number.isFinite(level))
    .sort((a, b) => a.throughput - b.throughput);
  const [lowest, highest] = [known[0], known[known.length - 1]];
  return [
    ["frames", json.frames.map(({ frame }) => frame).join(", ")],
    ["shape from", json.shapeFrames.length === 0 ? "the same frames" : json.shapeFrames.join(", ")],
    ["fibres", `${counted(known.length, "fibre")} of ${result.nFibre} with light`],
    [
      "levels",
      `${lowest.throughput.toFixed(3)} (fibre ${lowest.fibre}) to ${highest.throughput.toFixed(3)} (fibre ${highest.fibre}) of the median`,
    ],
    ["error", `${percentage(json.medianError, 3)} of a point, median`],
  ];
}
