/** hatchel arc: arcs to the wavelength of every column of every fibre. */
import { type Command, Option } from "commander";
import { type ArcExposure, type ArcResult, measureWavelengths } from "../calibration/arc.js";
import { joinLines, type LineList, lampLines } from "../calibration/lamps.js";
import { readLineFile } from "../calibration/lineFile.js";
import type { Medium } from "../calibration/medium.js";
import { writeWavelengths } from "../calibration/wavelengthFile.js";
import { extractFrame } from "../extraction/extract.js";
import type { Header } from "../fits/header.js";
import { summariseWavelengths, type WavelengthSummary } from "../report/wavelengths.js";
import type { Shift } from "../tramlines/shift.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { RefusalError } from "./failures.js";
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
  type Bench,
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
import { counted, fixed, textPairs } from "./textTable.js";
import { UsageError } from "./usage.js";
import { version } from "./version.js";

interface ArcOptions extends FrameOptions, TramlineOptions {
  output: string;
  force?: boolean;
  range?: string[];
  lamps?: string[];
  lines?: string;
  medium?: Medium;
}

/** What the lines are called by: options before the spectrograph file. */
interface LineChoice {
  list: LineList;
  range: [number, number];
  /** Lines for HISTORY. */
  history: string[];
  assumptions: string[];
}

export function addArc(command: Command): void {
  command
    .description(
      "Measures the wavelength of every column of every fibre from one or more arcs; the first defines the zero.",
    )
    .argument(
      "<ARC...>",
      "raw arcs of one readout window; different lamps may be in different ones; - is standard input",
    )
    .addOption(outputOption("wavelengths").makeOptionMandatory())
    .option("--range <first last...>", "Å at the first and at the last column, roughly; may fall")
    .option("--lamps <name...>", "lamps that were on, such as Ne Ar; no others")
    .option("--lines <file>", "your own list of lines, besides the lamps'")
    .addOption(new Option("--medium <medium>", "wavelengths in air or in vacuum").choices(["air", "vacuum"] as const))
    .addOption(forceOption());
  addTramlineOptions(command);
  addCommonOptions(addFrameOptions(command)).action((arcs: string[], options: ArcOptions) =>
    perform("arc", options, (progress) => arc(arcs, options, progress)),
  );
}

async function arc(arcs: string[], options: ArcOptions, progress: Progress): Promise<Outcome<"arc">> {
  requireTramlineSource("arc", options);
  const { output, force } = options;
  const inputs = inputPaths([...arcs, ...[options.lines ?? []].flat()], options);
  checkOutput(output, { force, inputs });
  const bench = await openBench(inputs, options, progress);
  const choice = await chooseLines(options, bench);
  const spectra = await extractArcs(arcs, options, bench, progress);
  progress.stage("measuring wavelengths");
  const result = measureWavelengths(spectra.exposures, spectra.tramlines, choice.list, choice.range);
  const product = {
    ...{ version, inputs: bench.inputs, header: spectra.header },
    options: [...choice.history, ...frameLines(options)],
  };
  await uninterrupted(() => writeWavelengths(output, result, product, { force, inputs }));
  const summary = summariseWavelengths(result);
  return {
    json: {
      output,
      ...arcJson(result, summary, spectra),
      assumptions: oneOfEach([...spectra.assumptions, ...choice.assumptions]),
      warnings: oneOfEach([...spectra.warnings, ...result.warnings]),
    },
    text: `${output === "-" ? "standard output" : output}: wavelengths\n${textPairs(facts(result, summary, spectra))}`,
  };
}

async function chooseLines(options: ArcOptions, { spectrograph, inputs }: Bench): Promise<LineChoice> {
  const known = spectrograph?.wavelength;
  const range = rangeOf(options.range) ?? known?.range;
  if (range === undefined) {
    throw new RefusalError(
      "nothing tells which wavelengths to expect; give --range with the Å at the first and at the last column, or 'range' under [wavelength] of the spectrograph file",
    );
  }
  const medium = options.medium ?? known?.medium ?? "air";
  const file = options.lines ?? known?.lines;
  const lamps = options.lamps ?? known?.lamps ?? [];
  if (lamps.length === 0 && file === undefined) {
    throw new RefusalError(
      "nothing tells which lamps were on; name them with --lamps, such as --lamps Ne Ar, or as 'lamps' under [wavelength] of the spectrograph file, or give a list of lines",
    );
  }
  const own = file === undefined ? [] : [await readLineFile(file)];
  if (file !== undefined) inputs.push(...fileInputs(file));
  const list = joinLines([...(lamps.length > 0 ? [lampLines(lamps, undefined, medium)] : []), ...own], medium);
  const unsaid = options.medium === undefined && known?.medium === undefined;
  return {
    list,
    range,
    history: [
      `range ${range.join(" ")}`,
      `medium ${medium}`,
      ...(lamps.length > 0 ? [`lamps ${lamps.join(" ")}`] : []),
    ],
    assumptions: unsaid ? ["wavelengths are given in air (--medium)."] : [],
  };
}

function rangeOf(words: string[] | undefined): [number, number] | undefined {
  if (words === undefined) return undefined;
  const [first, last] = words.map(Number);
  if (words.length === 2 && first > 0 && last > 0 && first !== last && Number.isFinite(first + last))
    return [first, last];
  throw new UsageError(
    `hatchel arc: --range is '${words.join(" ")}'; it must be two different wavelengths in Å, at the first and at the last column.`,
  );
}

interface ArcSpectra {
  exposures: ArcExposure[];
  shifts: (Shift | null)[];
  tramlines: Tramlines;
  header: Header | undefined;
  assumptions: string[];
  warnings: string[];
}

async function extractArcs(arcs: string[], options: ArcOptions, bench: Bench, progress: Progress): Promise<ArcSpectra> {
  let traced: TracedFor | undefined;
  const out: Omit<ArcSpectra, "tramlines"> = {
    exposures: [],
    shifts: [],
    header: undefined,
    assumptions: [],
    warnings: [],
  };
  for (const path of arcs) {
    const frame = await readFrame(path, "arc", bench);
    traced ??= await tramlinesFor(frame, options, bench, progress);
    progress.stage(`extracting ${frame.name}`);
    const naming = namingOptions(options);
    const extraction = await extractFrame(frame, traced.tramlines, {
      precision: "auto",
      ...naming,
      onProgress: progress.share,
    });
    out.exposures.push({ name: frame.name, spectra: extraction.spectra });
    out.shifts.push(extraction.shift);
    out.header ??= frame.header;
    out.assumptions.push(...frame.assumptions);
    out.warnings.push(...frame.warnings, ...extraction.warnings);
  }
  const { tramlines, assumptions, warnings } = traced!;
  return {
    ...out,
    tramlines,
    assumptions: [...out.assumptions, ...assumptions],
    warnings: [...out.warnings, ...warnings],
  };
}

function arcJson(result: ArcResult, summary: WavelengthSummary, { exposures, shifts }: ArcSpectra) {
  const { solution, fit, identification } = result;
  const [first, middle, last] = summary.resolution;
  return {
    medium: solution.medium,
    rangeAngstrom: summary.range,
    linesFromAngstrom: summary.linesFrom,
    linesToAngstrom: summary.linesTo,
    angstromPerPixel: summary.perPixel,
    degree: solution.degree,
    identification: {
      fibre: result.identifiedIn + 1,
      matched: identification.matches.length,
      score: identification.score,
      runnerUpScore: Number.isFinite(identification.runnerUp) ? identification.runnerUp : null,
      reversed: identification.reversed,
    },
    peaks: result.nPeak,
    unknownPeaks: result.nUnknown,
    lamps: summary.lamps,
    leftOut: summary.leftOut.map(({ off, ...rest }) => ({ ...rest, offAngstrom: off })),
    rmsPixels: summary.rmsPixels,
    rmsKilometresPerSecond: summary.rmsKilometresPerSecond,
    errorPixels: summary.errorPixels,
    worstRmsPixels: summary.worstRmsPixels,
    worstFibre: summary.worstFibre,
    offsetScatterPixels: fit.scatters.fibre,
    listScatterAngstrom: fit.scatters.line,
    fwhmPixels: summary.fwhmPixels,
    resolution: { first, middle, last },
    exposures: exposures.map(({ name }, i) => ({
      name,
      offsetPixels: fit.exposure[i],
      traceShiftPixels: shifts[i]?.coefficients[0] ?? null,
    })),
    fibres: Array.from(solution.nLine, (lines, k) => ({
      fibre: k + 1,
      state: fibreState(result, k),
      lines,
      rmsPixels: solution.rms[k],
      errorPixels: fit.error[k],
    })),
  };
}

function fibreState({ solution, fit }: ArcResult, k: number): "fitted" | "filled" | "none" {
  if (Number.isNaN(solution.legendre[k * (solution.degree + 1)])) return "none";
  return fit.filled.includes(k) ? "filled" : "fitted";
}

function facts(result: ArcResult, summary: WavelengthSummary, { exposures }: ArcSpectra): [string, string][] {
  const { solution, fit, identification, identifiedIn } = result;
  const { range, resolution, leftOut } = summary;
  const [first, last] = range;
  const fitted = solution.nLine.filter((n) => n > 0).length;
  const lost = leftOut.map(
    ({ wavelength, lamp, reason, off }) =>
      `${lamp} ${fixed(wavelength, 3)} (${reason}${Number.isNaN(off) ? "" : ` by ${fixed(off, 3)} Å`})`,
  );
  return [
    [
      "identified",
      `${identification.matches.length} lines in fibre ${identifiedIn + 1}: score ${fixed(identification.score, 0)}, next best reading ${Number.isFinite(identification.runnerUp) ? fixed(identification.runnerUp, 0) : "none"}`,
    ],
    ["lines used", summary.lamps.map(({ lamp, lines, points }) => `${lamp} ${lines} (${points} points)`).join(", ")],
    ["left out", lost.length === 0 ? "none" : lost.join(", ")],
    ["unknown peaks", `${result.nUnknown} of ${result.nPeak}`],
    [
      "wavelengths",
      `${fixed(first, 1)} to ${fixed(last, 1)} Å in ${solution.medium}, ${fixed(summary.perPixel, 4)} Å/px in the middle; lines from ${fixed(summary.linesFrom, 1)} to ${fixed(summary.linesTo, 1)} Å`,
    ],
    [
      "rms",
      `${fixed(summary.rmsPixels, 4)} px, ${fixed(summary.rmsKilometresPerSecond, 2)} km/s; worst ${fixed(summary.worstRmsPixels, 4)} px in fibre ${summary.worstFibre}; degree ${solution.degree}`,
    ],
    ["error", `${fixed(summary.errorPixels, 4)} px of a fibre's scale between its lines, median`],
    ["fibres", `${counted(fitted, "fibre")} fitted, ${fit.filled.length} filled from neighbours`],
    [
      "resolution",
      `${resolution.map((value) => fixed(value, 0)).join(", ")} at the first, middle, last column (FWHM ${fixed(summary.fwhmPixels, 2)} px)`,
    ],
    ...(exposures.length > 1
      ? ([["arcs", exposures.map(({ name }, i) => `${name} ${fixed(fit.exposure[i], 4)} px`).join(", ")]] as [
          string,
          string,
        ][])
      : []),
  ];
}
