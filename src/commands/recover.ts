/** hatchel recover: light of known flux put on one's own frame, and what the extraction makes of it. */
import { readFileSync } from "node:fs";
import { basename } from "node:path";
import type { Command } from "commander";
import { InvalidArgumentError, Option } from "commander";
import type { Frame } from "../detector/frame.js";
import { type CellScore, type DarkScore, type Recovery, recoverInjected } from "../extraction/recover.js";
import { RefusalError } from "./failures.js";
import {
  addCommonOptions,
  addFrameOptions,
  addMethodOptions,
  addTramlineOptions,
  type FrameOptions,
  forceOption,
  type MethodOptions,
  namingOptions,
  outputOption,
  requireFittingMethod,
  type TramlineOptions,
} from "./frameOptions.js";
import {
  type Bench,
  inputPaths,
  oneOfEach,
  openBench,
  readFrame,
  requireAperture,
  requireTramlineSource,
  tramlinesFor,
} from "./frames.js";
import { checkOutput, uninterrupted, writeText } from "./output.js";
import { jsonText, type Outcome, perform } from "./perform.js";
import type { Progress } from "./progress.js";
import { counted, fixed, percentage, textTable } from "./textTable.js";
import { UsageError } from "./usage.js";

interface RecoverOptions extends FrameOptions, TramlineOptions, MethodOptions {
  inject?: string[];
  seed: number;
  force?: boolean;
}

export function addRecover(command: Command): void {
  command
    .description(
      "Puts light of known flux, pixels of a fibre flat that the profiles were not made from, on a frame, extracts it again and says what came back. Exit code 1 when the extraction is not to be trusted.",
    )
    .argument("<FRAME>", "the raw frame; - is standard input")
    .addOption(outputOption("figures in JSON"));
  addTramlineOptions(command)
    .option(
      "--inject <file...>",
      "fibre flats to take the light from, other than those of the tramlines (default: the last --flat, which is then not traced)",
    )
    .addOption(new Option("--seed <n>", "of the injected light's noise").default(1).argParser(seed));
  addMethodOptions(command).addOption(forceOption());
  addCommonOptions(addFrameOptions(command)).action((frame: string, options: RecoverOptions) =>
    perform("recover", options, (progress) => recover(frame, options, progress)),
  );
}

function seed(text: string): number {
  if (/^\d{1,9}$/.test(text)) return Number(text);
  throw new InvalidArgumentError("it must be a whole number from 0 to 999999999");
}

async function recover(path: string, given: RecoverOptions, progress: Progress): Promise<Outcome<"recover">> {
  requireTramlineSource("recover", given);
  requireFittingMethod("recover", given);
  const { options, inject, assumption } = partFlats(given);
  const { output, force } = options;
  const inputs = inputPaths([path, ...inject], options);
  if (output !== undefined && output !== "-") checkOutput(output, { force, inputs });
  const bench = await openBench(inputs, options, progress);
  const frame = await readFrame(path, "science", bench);
  const traced = await tramlinesFor(frame, options, bench, progress);
  requireAperture(options.halfAperture, traced);
  const flats = await readInjected(inject, options, bench);
  progress.stage(`injecting into ${frame.name}`);
  const { method, crosstalk, precision, cosmicRays, refine, halfAperture } = options;
  const recovery = await refusing(() =>
    recoverInjected(frame, traced.tramlines, flats, {
      ...{ method, crosstalk, precision, cosmicRays, refine },
      ...(halfAperture === undefined ? {} : { halfAperture }),
      ...namingOptions(options),
      ...{ seed: options.seed, onProgress: progress.share },
    }),
  );
  const { warnings, ...figures } = recovery;
  const from = flats.map(({ name }) => name);
  const json = {
    ...{ frame: frame.name, method, injectedFrom: from, profile: traced.tramlines.profile.kind, ...figures },
    assumptions: oneOfEach([...assumption, ...[frame, ...flats, traced].flatMap((one) => one.assumptions)]),
    warnings: oneOfEach([...[frame, ...flats, traced].flatMap((one) => one.warnings), ...warnings]),
  };
  if (output !== undefined) await uninterrupted(async () => write(output, json, { force, inputs }));
  const { grade, sentence } = recovery.verdict;
  return {
    json,
    text: page(frame.name, from, recovery),
    ...(grade === "bad" ? { failed: `${frame.name}: ${sentence.replace(/\.$/, "")}` } : {}),
  };
}

/** Which flats trace and which are injected; what is injected may not have made the profiles, or nothing could fail.
 * @throws UsageError when none is left. */
function partFlats(given: RecoverOptions): { options: RecoverOptions; inject: string[]; assumption: string[] } {
  const { flat, inject } = given;
  if (inject !== undefined) return { options: given, inject, assumption: [] };
  const held = flat?.at(-1);
  if (flat === undefined || held === undefined || flat.length < 2) {
    throw new UsageError(
      "hatchel recover: no flat is left to take light from; give a second exposure with --inject, since light of the flat that the profiles were made from would always come back.",
    );
  }
  const traced = flat.slice(0, -1);
  return {
    options: { ...given, flat: traced },
    inject: [held],
    assumption: [
      `${basename(held)} is injected and not traced; profiles made with it too would be a little better than those tested here.`,
    ],
  };
}

/** @throws RefusalError for a flat that the tramlines were made from, told by its pixels' checksum. */
async function readInjected(paths: string[], options: RecoverOptions, bench: Bench): Promise<Frame[]> {
  const before = bench.inputs.map(({ checksum }) => checksum);
  const { tramlines } = options;
  const history = tramlines === undefined || tramlines === "-" ? "" : readFileSync(tramlines, "latin1");
  const flats: Frame[] = [];
  for (const path of paths) {
    const flat = await readFrame(path, "fibre flat", bench);
    const { checksum } = bench.inputs[bench.inputs.length - 1];
    if (before.includes(checksum) || (checksum !== "" && history.includes(checksum))) {
      throw new RefusalError(
        `${flat.name}: the profiles were made from this very flat, so that its light would always come back; inject another exposure.`,
      );
    }
    flats.push(flat);
  }
  return flats;
}

async function refusing<T>(work: () => Promise<T>): Promise<T> {
  try {
    return await work();
  } catch (error) {
    if (error instanceof RangeError && /recovery test/.test(error.message)) throw new RefusalError(error.message);
    throw error;
  }
}

function write(path: string, json: object, options: { force?: boolean | undefined; inputs: string[] }): void {
  const text = jsonText("recover", json);
  if (path === "-") process.stdout.write(text);
  else writeText(path, text, options);
}

function page(name: string, from: string[], recovery: Recovery): string {
  const { verdict, cells, dark, flatElectrons, movedPixels } = recovery;
  const moved = movedPixels > 0 ? `moved by up to ${fixed(movedPixels, 3)} px to the frame's light` : "where they are";
  return [
    `${name}: light of ${from.join(", ")} (${Math.round(flatElectrons)} e⁻ per column, pixels ${moved}) injected and extracted again`,
    textTable([LEVELS, ...cells.map(levelRow)]),
    ...(dark.length > 0 ? [textTable([DARK, ...dark.map(darkRow)])] : []),
    "Bias: (found - known) / known. Scatter: of found - known, in error bars. Bright: 30 times all the light in the fibre.",
    "Dark positions: places without a fibre, extracted like fibres; light found there as a share of the neighbour's.",
    ...verdict.findings.map(({ grade, sentence }) => `${grade}: ${sentence}`),
    verdict.sentence,
  ].join("\n");
}

const LEVELS = [
  "e⁻ per column",
  "to a bright fibre",
  "points",
  "bias",
  "±",
  "scatter",
  "> 5 σ",
  "lines",
  "cut",
  "dimmed",
];
const DARK = ["light", "dark positions", "number", "mean", "±", "worst", "scatter"];

function levelRow(cell: CellScore): string[] {
  return [
    `${cell.from}-${cell.to}`,
    cell.place,
    String(cell.nPoint),
    percentage(cell.bias, 2),
    percentage(cell.biasError, 2),
    fixed(cell.pull, 2),
    percentage(cell.beyond5Sigma, 2),
    String(cell.nLine),
    percentage(cell.lineFlaggedShare, 2),
    percentage(cell.lineClippedShare, 2),
  ];
}

function darkRow(one: DarkScore): string[] {
  return [
    one.light === "injected" ? "injected" : "the frame's own",
    one.distance === 1 ? "beside a fibre" : "next but one",
    counted(one.nPosition, "position"),
    percentage(one.meanShare, 3),
    percentage(one.meanError, 3),
    percentage(one.worstShare, 3),
    fixed(one.pull, 2),
  ];
}
