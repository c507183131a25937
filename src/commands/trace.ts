/** hatchel trace: fibre flats to tramlines. */
import type { Command } from "commander";
import { countFibres, medianFwhm } from "../report/summary.js";
import { writeTramlines } from "../tramlines/file.js";
import type { ProfileKind } from "../tramlines/profiles.js";
import type { Tracing } from "../tramlines/trace.js";
import {
  addCommonOptions,
  addFrameOptions,
  type FrameOptions,
  forceOption,
  outputOption,
  profileOption,
} from "./frameOptions.js";
import { frameLines, inputPaths, oneOfEach, openBench, type ProfiledTracing, traceFlats } from "./frames.js";
import { checkOutput, uninterrupted } from "./output.js";
import { type Outcome, perform } from "./perform.js";
import type { Progress } from "./progress.js";
import { counted, fixed, ranges, textPairs } from "./textTable.js";
import { version } from "./version.js";

interface TraceCommandOptions extends FrameOptions {
  profile?: ProfileKind | "auto";
  output: string;
  force?: boolean;
}

export function addTrace(command: Command): void {
  command
    .description("Finds, names and traces the fibres of one or more fibre flats.")
    .argument("<FLAT...>", "fibre flats of one readout window; - is standard input")
    .addOption(outputOption("tramlines").makeOptionMandatory())
    .addOption(profileOption())
    .addOption(forceOption());
  addCommonOptions(addFrameOptions(command)).action((flats: string[], options: TraceCommandOptions) =>
    perform("trace", options, (progress) => trace(flats, options, progress)),
  );
}

async function trace(flats: string[], options: TraceCommandOptions, progress: Progress): Promise<Outcome<"trace">> {
  const { output, force } = options;
  const inputs = inputPaths(flats, options);
  checkOutput(output, { force, inputs });
  const bench = await openBench(inputs, options, progress);
  const { tracing, tramlines, header, assumptions, warnings } = await traceFlats(
    flats,
    bench,
    progress,
    options.profile,
  );
  const lines = frameLines({ ...options, flat: flats });
  const file = { version, options: lines, inputs: bench.inputs, header };
  await uninterrupted(() => writeTramlines(output, tramlines, file, { force, inputs }));
  return {
    json: {
      output,
      ...tracingJson(tracing!),
      assumptions: oneOfEach(assumptions),
      warnings: oneOfEach(warnings),
    },
    text: `${output === "-" ? "standard output" : output}: tramlines\n${textPairs(tracingFacts(tracing!))}`,
  };
}

/** Part of the JSON object of every command that traces. */
export function tracingJson(tracing: ProfiledTracing) {
  const { tramlines, naming } = tracing;
  return {
    fibres: countFibres(tramlines),
    degree: tracing.degree,
    rmsPixels: tracing.rms,
    worstRmsPixels: tracing.worstRms,
    worstFibre: tracing.worstFibre,
    naming: { ...naming, runnerUpScore: Number.isFinite(naming.runnerUpScore) ? naming.runnerUpScore : null },
    profile: {
      kind: tramlines.profile.kind,
      medianFwhmPixels: medianFwhm(tramlines),
      relativeError: tramlines.profile.relativeError,
      tried: tracing.tried,
    },
  };
}

/** The same for people. */
export function tracingFacts(tracing: ProfiledTracing): [string, string][] {
  const { tramlines, naming } = tracing;
  return [
    ["fibres", fibresText(countFibres(tramlines))],
    ["naming", naming.readings.join("; ")],
    ["trace", traceText(tracing)],
    [
      "profile",
      `${tramlines.profile.kind}, median FWHM ${fixed(medianFwhm(tramlines), 2)} px, strays from the light by ${fixed(100 * tramlines.profile.relativeError, 1)} %; misfit on held-out columns: ${tracing.tried.map(({ kind, misfit, error }) => `${kind} ${fixed(misfit, 2)} ± ${fixed(error, 2)}`).join(", ")}`,
    ],
  ];
}

export function fibresText(fibres: ReturnType<typeof countFibres>): string {
  const parts = [`${fibres.positions} positions in ${counted(fibres.blocks, "block")}: ${fibres.lit} lit`];
  if (fibres.dim > 0) parts.push(`${fibres.dim} dim (${ranges(fibres.dimPositions)})`);
  parts.push(fibres.dead > 0 ? `${fibres.dead} dead (${ranges(fibres.deadPositions)})` : "none dead");
  return parts.join(", ");
}

function traceText({ rms, worstRms, worstFibre, degree }: Tracing): string {
  const verdict = rms <= 0.02 ? "good" : rms < 0.1 ? "fair: weighting wants 0.02 px" : "too poor for weighting";
  return `rms ${fixed(rms, 4)} px (${verdict}), worst ${fixed(worstRms, 4)} px in fibre ${worstFibre}, degree ${degree}`;
}
