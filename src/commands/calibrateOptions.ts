/** The calibrated part of 'hatchel extract': wavelengths, throughput and sky, and what is told of them. */
import { basename } from "node:path";
import { type Command, Option } from "commander";
import { type Calibrated, calibrateSpectra } from "../calibration/calibrate.js";
import { calibratedHdus, calibrationCards } from "../calibration/calibratedHdus.js";
import { fibreLevels, readThroughput } from "../calibration/throughputFile.js";
import { readWavelengths } from "../calibration/wavelengthFile.js";
import { medianOf } from "../detector/clip.js";
import type { Frame } from "../detector/frame.js";
import type { Extraction } from "../extraction/extract.js";
import { RefusalError } from "./failures.js";
import { type Bench, fileInputs } from "./frames.js";
import type { JsonOf } from "./json.js";
import type { Progress } from "./progress.js";
import { counted, fixed, percentage, ranges } from "./textTable.js";
import { UsageError } from "./usage.js";

type SkyChoice = "on" | "off" | "scaled";

export interface CalibrateOptions {
  wavelengths?: string;
  throughput?: string;
  sky: SkyChoice;
}

export function addCalibrateOptions(command: Command): Command {
  return command
    .option("--wavelengths <file>", "wavelengths that 'hatchel arc' wrote")
    .option("--throughput <file>", "relative throughput that 'hatchel throughput' wrote, divided by")
    .addOption(
      new Option(
        "--sky <on|off|scaled>",
        "take off the sky that the fibres in 'slit.sky' of the spectrograph file see; an object in one of them is looked for, but light that all of them share with the target goes too; scaled also fits how bright the sky's lines are in each fibre, which a target's own line on a lone sky line can mislead",
      )
        .default("off")
        .argParser(skyChoice),
    );
}

function skyChoice(text: string): SkyChoice {
  if (text === "on" || text === "off" || text === "scaled") return text;
  throw new UsageError(`hatchel: --sky is '${text}'; it must be on, off or scaled.`);
}

/** Files among the options. */
export function calibratePaths({ wavelengths, throughput }: CalibrateOptions): string[] {
  return [wavelengths ?? [], throughput ?? []].flat();
}

/** What changes numbers, as lines for HISTORY; none without wavelengths. */
export function calibrateLines({ wavelengths, throughput, sky }: CalibrateOptions): string[] {
  return [
    ...(wavelengths === undefined ? [] : [`wavelengths ${basename(wavelengths)}`]),
    ...(throughput === undefined ? [] : [`throughput ${basename(throughput)}`]),
    ...(wavelengths === undefined ? [] : [`sky ${sky}`]),
  ];
}

/** @throws UsageError for options that need another one. */
export function requireFittingCalibration(options: CalibrateOptions): void {
  const { wavelengths, throughput, sky } = options;
  if (wavelengths !== undefined) return;
  const needing = throughput !== undefined ? "--throughput is" : sky !== "off" ? `--sky ${sky} is` : undefined;
  if (needing === undefined) return;
  throw new UsageError(
    `hatchel extract: ${needing} given without --wavelengths; reduce an arc with 'hatchel arc' and give its wavelengths.`,
  );
}

/** @throws RefusalError when no fibre is known to see the sky alone; CalibrationError for calibrations of another readout. */
export async function calibrateExtraction(
  frame: Frame,
  extraction: Extraction,
  options: CalibrateOptions,
  bench: Bench,
  progress: Progress,
): Promise<Calibrated | undefined> {
  const { wavelengths, throughput } = options;
  if (wavelengths === undefined) return undefined;
  const skyFibres = skyRows(options, bench, extraction.spectra.nFibre);
  const solution = await readWavelengths(wavelengths);
  bench.inputs.push(...fileInputs(wavelengths), ...fileInputs(throughput));
  progress.stage(`calibrating ${frame.name}`);
  return calibrateSpectra(extraction.spectra, frame.geometry.digest, {
    solution,
    ...(throughput === undefined ? {} : { throughput: await readThroughput(throughput) }),
    ...(skyFibres === undefined ? {} : { skyFibres, scaleLines: options.sky === "scaled" }),
    name: frame.name,
  });
}

/** Before the long work: is there a sky to take off?
 * @throws RefusalError */
export function requireSkyFibres({ sky }: CalibrateOptions, { spectrograph }: Bench): void {
  if (sky === "off" || (spectrograph?.slit?.sky.length ?? 0) > 0) return;
  const finding =
    spectrograph === undefined
      ? `--sky ${sky}, but no spectrograph file is given`
      : `${spectrograph.file}: --sky ${sky}, but 'slit.sky' names no fibres`;
  throw new RefusalError(
    `${finding}; list the slit positions that see only sky there, as 'sky = [3, 11]' under [slit].`,
  );
}

/** Rows from 0. @throws RefusalError for a position beyond the slit. */
function skyRows({ sky }: CalibrateOptions, { spectrograph }: Bench, nFibre: number): number[] | undefined {
  if (sky === "off") return undefined;
  const positions = spectrograph?.slit?.sky ?? [];
  const beyond = positions.find((position) => position > nFibre);
  if (beyond !== undefined) {
    throw new RefusalError(
      `${spectrograph?.file}: 'slit.sky' names position ${beyond}, but the slit has ${nFibre}; correct the list.`,
    );
  }
  return positions.map((position) => position - 1);
}

/** For the product's file. */
export function calibrationOf(calibrated: Calibrated | undefined) {
  if (calibrated === undefined) return { hdus: [], calibration: undefined };
  const { throughput } = calibrated;
  const levels = throughput === null ? null : fibreLevels(throughput);
  return {
    hdus: calibratedHdus(calibrated),
    calibration: { cards: calibrationCards(calibrated), throughput: levels },
  };
}

/** What is taken for granted of calibrated spectra. */
export function calibrationAssumptions(calibrated: Calibrated | undefined, name: string): string[] {
  if (calibrated === undefined) return [];
  const { zeroPoint, throughput, sky } = calibrated;
  return [
    ...(zeroPoint !== null
      ? []
      : [`${name}: its light lies where the arc's lay; no sky line was strong enough to measure a zero point on.`]),
    ...(sky !== null && throughput === null
      ? [
          `${name}: all fibres pass on the same share of light, for want of --throughput; the sky comes off wrongly where they do not.`,
        ]
      : []),
  ];
}

type CalibrationJson = JsonOf<"extract">["calibration"];

export function calibrationJson(calibrated: Calibrated | undefined): CalibrationJson {
  if (calibrated === undefined) return null;
  const { medium, zeroPoint, throughput } = calibrated;
  return {
    medium,
    zeroPoint: zeroPoint === null ? null : { pixels: zeroPoint.pixels, error: zeroPoint.error, lines: zeroPoint.nLine },
    throughput: throughput !== null,
    sky: skyJson(calibrated),
  };
}

function skyJson({ sky, scaled }: Calibrated): NonNullable<CalibrationJson>["sky"] {
  if (sky === null) return null;
  const out = new Set(sky.leftOut.map(({ fibre }) => fibre));
  const used = sky.checks.filter(({ fibre }) => !out.has(fibre));
  const median = (key: "pullBetween" | "pullAtLines") => medianOf(used.map((check) => check[key]));
  return {
    scaled: scaled !== null,
    fibres: used.length,
    leftOut: sky.leftOut.map(({ fibre }) => fibre + 1),
    clippedSamples: sky.nClipped,
    coefficients: sky.spline.fit.coef.length,
    level: medianOf(sky.values),
    meanResidualShare: used.reduce((sum, { residual }) => sum + residual, 0) / used.length,
    ...{ pullBetween: median("pullBetween"), pullAtLines: median("pullAtLines") },
    checks: sky.checks.map(({ fibre, residual, error, pullBetween, pullAtLines }) => ({
      ...{ fibre: fibre + 1, leftOut: out.has(fibre), residualShare: residual, residualError: error },
      ...{ pullBetween, pullAtLines },
    })),
  };
}

/** The same for people. */
export function calibrationFacts(calibrated: Calibrated | undefined): [string, string][] {
  if (calibrated === undefined) return [];
  const { medium, zeroPoint, throughput } = calibrated;
  const zero =
    zeroPoint === null
      ? "zero point not measured"
      : `zero point ${fixed(zeroPoint.pixels, 3)} ± ${fixed(zeroPoint.error, 3)} px from ${counted(zeroPoint.nLine, "line")}`;
  const facts: [string, string][] = [["wavelengths", `in ${medium}, the observer's rest frame; ${zero}`]];
  facts.push(["throughput", throughput === null ? "not divided by" : "divided by"]);
  const sky = skyJson(calibrated);
  if (sky === null) return [...facts, ["sky", "left on"]];
  const left = sky.leftOut.length === 0 ? "none left out" : `${ranges(sky.leftOut)} left out`;
  return [
    ...facts,
    [
      "sky",
      `from ${counted(sky.fibres, "fibre")} (${left}), median ${fixed(sky.level, 1)} e⁻; each foretold from the others: pulls ${fixed(sky.pullBetween, 2)} between lines, ${fixed(sky.pullAtLines, 2)} at lines, mean residual ${percentage(sky.meanResidualShare, 2)} of the sky`,
    ],
  ];
}
