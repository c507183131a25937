/** What 'hatchel extract' adds on request: a second frame against cosmic rays, the cross-talk matrix and frames that measure
 * it, rejected pixels, scattered light, and sums over the fibres of a target. */
import type { Command } from "commander";
import type { Frame } from "../detector/frame.js";
import { findPairHits, type PairHits } from "../extraction/cosmicPair.js";
import { type CrosstalkMatrix, measureCrosstalk } from "../extraction/crosstalkMatrix.js";
import type { Extraction } from "../extraction/extract.js";
import { crosstalkHdus, rejectedHdu, scatteredHdu, seenHdu, targetsHdu } from "../extraction/extraHdus.js";
import { measureSingleFibre, type SingleFibreCheck } from "../extraction/singleFibre.js";
import { neglectedShare, sumFibres, type TargetSpectra } from "../extraction/targets.js";
import type { OutputHdu } from "../fits/encode.js";
import { median } from "../reference/median.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { RefusalError } from "./failures.js";
import { type MethodOptions, namingOptions, type TramlineOptions } from "./frameOptions.js";
import { type Bench, readFrame } from "./frames.js";
import type { JsonOf } from "./json.js";
import type { Progress } from "./progress.js";
import { counted, fixed, percentage } from "./textTable.js";
import { UsageError } from "./usage.js";

export interface ExtraOptions {
  pair?: string;
  singleFibre?: string[];
  crosstalkMatrix?: boolean;
  writeCosmicRays?: boolean;
  writeBackground?: boolean;
}

/** All that came of them; absent where not asked for. */
export interface Extras {
  hdus: OutputHdu[];
  pair?: PairHits;
  matrix?: CrosstalkMatrix;
  checks: SingleFibreCheck[];
  sums?: TargetSpectra;
  neglected?: Float64Array;
  warnings: string[];
}

export function addExtraOptions(command: Command): Command {
  return command
    .option("--pair <frame>", "a second frame of the same field: what it does not have is a cosmic ray")
    .option("--single-fibre <frame...>", "frames with one or a few fibres lit, to measure cross-talk on")
    .option("--crosstalk-matrix", "write the boxcar's cross-talk matrix with joint too; boxcar and optimal always do")
    .option("--write-cosmic-rays", "add the image REJECTED: pixels rejected as cosmic rays")
    .option("--write-background", "add the image SCATTERED: light between the fibres, as taken off");
}

/** Files among the options. */
export function extraPaths({ pair, singleFibre }: ExtraOptions): string[] {
  return [pair ?? [], singleFibre ?? []].flat();
}

/** What changes numbers or HDUs, as lines for HISTORY. */
export function extraLines(options: ExtraOptions): string[] {
  const base = (path: string) => path.slice(path.lastIndexOf("/") + 1);
  return [
    ...(options.pair === undefined ? [] : [`pair ${base(options.pair)}`]),
    ...(options.singleFibre ?? []).map((path) => `single-fibre ${base(path)}`),
    ...(options.crosstalkMatrix ? ["crosstalk-matrix"] : []),
    ...(options.writeCosmicRays ? ["write-cosmic-rays"] : []),
    ...(options.writeBackground ? ["write-background"] : []),
  ];
}

/** @throws UsageError for options that work against each other. */
export function requireFittingExtras(options: ExtraOptions & MethodOptions): void {
  const needing = options.pair !== undefined ? "--pair" : options.writeCosmicRays ? "--write-cosmic-rays" : undefined;
  if (options.cosmicRays || needing === undefined) return;
  throw new UsageError(
    `hatchel extract: ${needing} is about cosmic rays, but --cosmic-rays is off; leave one of the two out.`,
  );
}

/** Hits that the second frame tells of; undefined without one. */
export async function pairHits(
  frame: Frame,
  tramlines: Tramlines,
  options: ExtraOptions & MethodOptions & TramlineOptions,
  bench: Bench,
  progress: Progress,
): Promise<PairHits | undefined> {
  if (options.pair === undefined) return undefined;
  const pair = await readFrame(options.pair, "science", bench);
  progress.stage(`comparing ${frame.name} with ${pair.name}`);
  return refusing(() =>
    findPairHits(frame, pair, tramlines, { precision: options.precision, ...namingOptions(options) }),
  );
}

export async function measureExtras(
  frame: Frame,
  tramlines: Tramlines,
  extraction: Extraction,
  options: ExtraOptions,
  bench: Bench,
  progress: Progress,
): Promise<Extras> {
  const { method, crosstalkCorrected } = extraction.spectra;
  const extras: Extras = { hdus: [], checks: [], warnings: [] };
  if (method !== "joint" || options.crosstalkMatrix || options.singleFibre !== undefined) {
    extras.matrix = measureCrosstalk(extraction);
    extras.hdus.push(...crosstalkHdus(extras.matrix, crosstalkCorrected));
  }
  for (const path of options.singleFibre ?? []) {
    const single = await readFrame(path, "science", bench);
    progress.stage(`measuring cross-talk on ${single.name}`);
    extras.checks.push(await refusing(() => measureSingleFibre(single, tramlines, extraction)));
  }
  if (extras.checks.length > 0) extras.hdus.push(seenHdu(extras.checks));
  extras.warnings.push(...extras.checks.flatMap(({ warnings }) => warnings));
  if (options.writeCosmicRays) extras.hdus.push(rejectedHdu(extraction, frame));
  if (options.writeBackground) extras.hdus.push(scatteredHdu(extraction, frame));
  const targets = bench.spectrograph?.slit?.targets;
  if (targets !== undefined && targets.length > 0) {
    extras.sums = await refusing(async () => sumFibres(extraction.spectra, targets));
    extras.neglected = neglectedShare(extraction, extras.sums);
    extras.hdus.push(targetsHdu(extras.sums, extras.neglected));
  }
  return extras;
}

type ExtractJson = JsonOf<"extract">;

export function extrasJson(
  pair: PairHits | undefined,
  extras: Extras,
): Pick<ExtractJson, "pair" | "crosstalk" | "targets"> {
  return {
    pair:
      pair === undefined
        ? null
        : { hitPixels: pair.nPixel, scale: pair.scale, profileError: pair.profileError, lineError: pair.lineError },
    crosstalk: extras.matrix === undefined ? null : crosstalkJson(extras.matrix, extras.checks),
    targets: (extras.sums?.targets ?? []).map(({ name, fibres }, i) => ({
      name,
      fibres,
      used: extras.sums!.used[i],
      medianSignalToNoise: targetSignalToNoise(extras.sums!, i),
      neglectedShare: extras.neglected![i],
    })),
  };
}

function crosstalkJson(matrix: CrosstalkMatrix, checks: SingleFibreCheck[]): ExtractJson["crosstalk"] {
  return {
    estimator: matrix.estimator,
    halfAperturePixels: matrix.halfAperture,
    modelByDistance: sharesByDistance(matrix).map((share, distance) => ({ distance, share })),
    seen: checks.map(({ frame, leaks, nDisagree }) => ({ frame, disagreeing: nDisagree, leaks })),
  };
}

/** Median share over fibres and both sides, by distance in slit positions. */
function sharesByDistance({ mean, reach, nFibre }: CrosstalkMatrix): number[] {
  const width = 2 * reach + 1;
  return Array.from({ length: reach + 1 }, (_, distance) => {
    const both = Array.from({ length: nFibre }, (_, k) =>
      [reach - distance, reach + distance].map((j) => mean[k * width + j]),
    );
    const there = both.flat().filter((share) => !Number.isNaN(share));
    return there.length > 0 ? median(there) : Number.NaN;
  });
}

function targetSignalToNoise({ flux, variance, nx }: TargetSpectra, i: number): number {
  const ratios = Array.from({ length: nx }, (_, x) => flux[i * nx + x] / Math.sqrt(variance[i * nx + x]));
  const there = ratios.filter((ratio) => !Number.isNaN(ratio));
  return there.length > 0 ? median(there) : Number.NaN;
}

/** The same for people. */
export function extrasFacts(pair: PairHits | undefined, extras: Extras): [string, string][] {
  const facts: [string, string][] = [];
  if (pair !== undefined) {
    facts.push([
      "pair",
      `${counted(pair.nPixel, "pixel")} hit that the second frame, ${fixed(1 / pair.scale, 3)} times as bright, does not have`,
    ]);
  }
  if (extras.matrix !== undefined) {
    const [own, next, second] = sharesByDistance(extras.matrix).map((share) => percentage(share, 2));
    facts.push([
      "cross-talk",
      `${extras.matrix.estimator}, from the profile model: ${own} of its own light, ${next ?? "none"} of a neighbour's, ${second ?? "none"} of the next but one's`,
    ]);
  }
  for (const check of extras.checks) facts.push(["", seenText(check)]);
  extras.sums?.targets.forEach(({ name }, i) => {
    const used = extras.sums!.used[i];
    facts.push([
      `target ${name}`,
      `${counted(used.length, "fibre")}, median S/N ${fixed(targetSignalToNoise(extras.sums!, i), 1)}; covariances beyond next neighbours, left out: ${percentage(extras.neglected![i], 2)} of the variance at most`,
    ]);
  });
  return facts;
}

/** Next neighbours as the frame shows them. */
function seenText({ frame, leaks, nDisagree }: SingleFibreCheck): string {
  const next = leaks.filter(({ lit, fibre }) => Math.abs(lit - fibre) === 1);
  const parts = next.map(
    ({ lit, fibre, share, error, model }) =>
      `${lit} to ${fibre} ${percentage(share, 3)} ± ${percentage(error, 3)} (model ${percentage(model, 3)})`,
  );
  return `seen in ${frame}: ${parts.join(", ")}; ${nDisagree} of ${counted(leaks.length, "leak")} disagree with the model`;
}

/** The library's sentences about what it was given are refusals here. */
async function refusing<T>(work: () => Promise<T>): Promise<T> {
  try {
    return await work();
  } catch (error) {
    if (!(error instanceof RangeError)) throw error;
    throw new RefusalError(error.message);
  }
}
