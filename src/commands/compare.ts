/** hatchel compare: the methods side by side on one's own frame. */
import type { Command } from "commander";
import { type Comparison, compareMethods, type MethodComparison } from "../extraction/compare.js";
import {
  addCommonOptions,
  addFrameOptions,
  addKernelOptions,
  addTramlineOptions,
  type FrameOptions,
  forceOption,
  type MethodOptions,
  namingOptions,
  outputOption,
  type TramlineOptions,
} from "./frameOptions.js";
import {
  inputPaths,
  oneOfEach,
  openBench,
  readFrame,
  requireAperture,
  requireTramlineSource,
  tramlinesFor,
} from "./frames.js";
import { jsonHelp } from "./json.js";
import { checkOutput, uninterrupted, writeText } from "./output.js";
import { jsonText, type Outcome, perform } from "./perform.js";
import type { Progress } from "./progress.js";
import { fixed, percentage, textTable } from "./textTable.js";

interface CompareOptions extends FrameOptions, TramlineOptions, Omit<MethodOptions, "method" | "crosstalk"> {
  force?: boolean;
}

export function addCompare(program: Command): void {
  const command = program
    .command("compare")
    .summary("the methods side by side on a frame")
    .description("Extracts a frame with every method and compares signal to noise, flux and leaked light.")
    .argument("<FRAME>", "the raw frame; - is standard input")
    .addOption(outputOption("figures in JSON"));
  addTramlineOptions(command);
  addKernelOptions(command).addOption(forceOption());
  addCommonOptions(addFrameOptions(command))
    .addHelpText("after", jsonHelp("compare"))
    .action((frame: string, options: CompareOptions) =>
      perform("compare", options, (progress) => compare(frame, options, progress)),
    );
}

async function compare(path: string, options: CompareOptions, progress: Progress): Promise<Outcome<"compare">> {
  requireTramlineSource("compare", options);
  const { output, force } = options;
  const inputs = inputPaths([path], options);
  if (output !== undefined && output !== "-") checkOutput(output, { force, inputs });
  const bench = await openBench(inputs, options, progress);
  const frame = await readFrame(path, "science", bench);
  const traced = await tramlinesFor(frame, options, bench, progress);
  requireAperture(options.halfAperture, traced);
  progress.stage(`comparing on ${frame.name}`);
  const { precision, cosmicRays, halfAperture } = options;
  const comparison = await compareMethods(frame, traced.tramlines, {
    ...{ precision, cosmicRays, ...(halfAperture === undefined ? {} : { halfAperture }) },
    ...namingOptions(options),
    onProgress: progress.share,
  });
  const json = {
    frame: frame.name,
    points: comparison.nPoint,
    witnesses: comparison.nWitness,
    methods: comparison.methods,
    cautions: cautions(comparison),
    assumptions: oneOfEach([...frame.assumptions, ...traced.assumptions]),
    warnings: oneOfEach([...frame.warnings, ...traced.warnings, ...comparison.warnings]),
  };
  if (output !== undefined) await uninterrupted(() => writeFigures(output, json, { force, inputs }));
  return { json, text: page(frame.name, comparison, json.cautions) };
}

/** Without the seconds: the same inputs give the same bytes. */
async function writeFigures(
  output: string,
  json: { methods: MethodComparison[] },
  options: { force?: boolean | undefined; inputs: string[] },
): Promise<void> {
  const methods = json.methods.map(({ seconds: _seconds, ...figures }) => figures);
  const text = jsonText("compare", { ...json, methods });
  if (output === "-") process.stdout.write(text);
  else writeText(output, text, options);
}

function page(name: string, { methods, nPoint, nWitness }: Comparison, cautions: string[]): string {
  const heading = ["method", "median S/N", "worth in exposure", "… faint quarter", "flux / joint", "leak", "s"];
  const rows = methods.map((one) => [
    methodName(one),
    fixed(one.medianSignalToNoise, 2),
    `${fixed(one.equivalentExposure, 3)} ×`,
    `${fixed(one.equivalentExposureFaint, 3)} ×`,
    fixed(one.fluxRatio, 4),
    percentage(one.leakedShare, 2),
    fixed(one.seconds, 1),
  ]);
  return [
    `${name}: ${nPoint} points good in every method, ${nWitness} of them beside a fibre 30 times brighter`,
    textTable([heading, ...rows]),
    "Worth in exposure: time that boxcar with cross-talk correction would need for the same error bars, over the time taken.",
    "Leak: share of the bright neighbour's light that the method counts twice, against joint.",
    ...cautions.map((caution) => `Caution: ${caution}`),
  ].join("\n");
}

function methodName({ method, crosstalkCorrected }: MethodComparison): string {
  if (method === "joint") return "joint";
  return `${method}, ${crosstalkCorrected ? "cross-talk corrected" : "uncorrected"}`;
}

/** Where a wrong reading of the table would cost someone. */
function cautions({ methods, nWitness }: Comparison): string[] {
  const said = [
    "S/N and worth in exposure rest on each method's own error bars, which are right only as far as the profile is; 'hatchel demo' shows them against the truth.",
  ];
  if (nWitness === 0) {
    said.push("no fibre stands beside one 30 times brighter, so this frame says nothing about leaked light.");
  } else said.push("leak is measured against joint, so light that joint itself misplaces does not show.");
  const joint = methods.find(({ method }) => method === "joint");
  for (const one of methods) {
    if (!one.crosstalkCorrected && joint && one.medianSignalToNoise > joint.medianSignalToNoise) {
      said.push(`${methodName(one)} takes neighbours' light for signal, so its higher S/N is no gain.`);
    }
    if (!one.crosstalkCorrected && Math.abs(one.leakedShare) > 0.01) {
      said.push(
        `${methodName(one)} counts ${percentage(one.leakedShare)} of a bright neighbour's light as the faint fibre's own: its S/N beside bright fibres is not that of the target.`,
      );
    }
    if (Math.abs(one.fluxRatio - 1) > 0.02) {
      said.push(
        `${methodName(one)} finds ${percentage(one.fluxRatio)} of joint's flux: do not mix fluxes of the two methods.`,
      );
    }
  }
  return said;
}
