/** hatchel compare: the methods side by side on one's own frame. */
import type { Command } from "commander";
import { type Comparison, compareMethods, type MethodComparison } from "../extraction/compare.js";
import { type FibreAdvice, recommendation } from "../extraction/recommend.js";
import { cautions, methodName } from "./compareCautions.js";
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
import { checkOutput, uninterrupted, writeText } from "./output.js";
import { jsonText, type Outcome, perform } from "./perform.js";
import type { Progress } from "./progress.js";
import { counted, fixed, percentage, ranges, textTable } from "./textTable.js";

interface CompareOptions extends FrameOptions, TramlineOptions, Omit<MethodOptions, "method" | "crosstalk"> {
  force?: boolean;
}

export function addCompare(command: Command): void {
  command
    .description("Extracts a frame with every method and compares signal to noise, flux and leaked light.")
    .argument("<FRAME>", "the raw frame; - is standard input")
    .addOption(outputOption("figures in JSON"));
  addTramlineOptions(command);
  addKernelOptions(command).addOption(forceOption());
  addCommonOptions(addFrameOptions(command)).action((frame: string, options: CompareOptions) =>
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
  const { precision, cosmicRays, refine, halfAperture } = options;
  const comparison = await compareMethods(frame, traced.tramlines, {
    ...{ precision, cosmicRays, refine, ...(halfAperture === undefined ? {} : { halfAperture }) },
    ...namingOptions(options),
    onProgress: progress.share,
  });
  const json = {
    frame: frame.name,
    points: comparison.nPoint,
    witnesses: comparison.nWitness,
    methods: comparison.methods,
    theory: { halfAperturePixels: comparison.halfAperturePixels, ...comparison.theory },
    leaks: comparison.leaks,
    agreement: comparison.agreement,
    recommended: recommendation(comparison.fibres),
    fibres: comparison.fibres,
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

function page(name: string, comparison: Comparison, cautions: string[]): string {
  const { nPoint, nWitness, theory, halfAperturePixels } = comparison;
  const { method, reason } = recommendation(comparison.fibres);
  return [
    `${name}: ${nPoint} points good in every method, ${nWitness} of them beside a fibre 30 times brighter`,
    methodTable(comparison),
    "Worth in exposure: time that boxcar with cross-talk correction would need for the same error bars, over the time taken;",
    "theory: what profile and noise let it be; scatter: what the spectra show where noise rules, of what is promised there.",
    "Leak: share of the bright neighbour's light that the method counts twice, against joint.",
    `A fibre alone, boxcar of ± ${fixed(halfAperturePixels, 2)} px (${percentage(theory.caughtShare)} of its light; noise-equivalent width ${fixed(theory.noiseEquivalentWidth, 2)} px): weighting is worth ` +
      `${fixed(theory.backgroundLimited, 3)} × exposure where background rules (S/N × ${fixed(Math.sqrt(theory.backgroundLimited), 3)}), ${fixed(theory.photonLimited, 3)} × where its own photons do.`,
    "Leak of the brightest fibres into their neighbours, uncorrected:",
    leakTable(comparison),
    "Difference from joint, in sigma of the difference: median and scatter (1 is noise alone); in joint's error bars:",
    agreementTable(comparison),
    ...adviceLines(comparison.fibres),
    `Recommended: ${method ?? "none"}, ${reason}.`,
    ...cautions.map((caution) => `Caution: ${caution}`),
  ].join("\n");
}

function methodTable({ methods }: Comparison): string {
  const heading = ["method", "median S/N", "worth", "theory", "faint quarter", "scatter", "flux / joint", "leak", "s"];
  const rows = methods.map((one) => [
    methodName(one),
    fixed(one.medianSignalToNoise, 2),
    `${fixed(one.equivalentExposure, 3)} ×`,
    `${fixed(one.expectedExposure, 3)} ×`,
    `${fixed(one.equivalentExposureFaint, 3)} ×`,
    `${fixed(one.seenExposure, 2)} of ${fixed(one.promisedExposure, 2)} ×`,
    fixed(one.fluxRatio, 4),
    percentage(one.leakedShare, 2),
    fixed(one.seconds, 1),
  ]);
  return textTable([heading, ...rows]);
}

/** Rows for people: the brightest fibres; JSON holds more. */
const nLeaking = 4;

function leakTable({ leaks }: Comparison): string {
  const brightest = [...new Set(leaks.map(({ bright }) => bright))].slice(0, nLeaking);
  const rows = leaks
    .filter(({ bright, crosstalkCorrected }) => !crosstalkCorrected && brightest.includes(bright))
    .map(({ bright, fibre, method, share, error, model, modelOfAll }) => [
      `${bright} to ${fibre}, ${method}`,
      `${percentage(share, 3)} ± ${percentage(error, 3)}`,
      percentage(modelOfAll, 3),
      percentage(model, 3),
    ]);
  return textTable([["from, to", "seen", "model, all neighbours", "model, this one"], ...rows]);
}

function agreementTable({ agreement }: Comparison): string {
  const rows = agreement.flatMap((one) =>
    one.levels.map(({ from, to, nPoint, median, spread, medianInErrorBars }) => [
      `${methodName(one)}, ${Number.isFinite(from) ? `${from} e⁻` : "faintest"} to ${Number.isFinite(to) ? `${to} e⁻` : "brightest"}`,
      ...[String(nPoint), fixed(median, 2), fixed(spread, 2), fixed(medianInErrorBars, 2)],
    ]),
  );
  return textTable([["method, joint's flux", "points", "median", "scatter", "in error bars"], ...rows]);
}

/** Who should take what, with the most telling reason of each. */
function adviceLines(fibres: FibreAdvice[]): string[] {
  return (["joint", "optimal", "boxcar"] as const).flatMap((method) => {
    const those = fibres.filter((one) => one.method === method);
    if (those.length === 0) return [];
    const worst = those.reduce((a, b) => (telling(b) > telling(a) ? b : a));
    return `For ${counted(those.length, "fibre")} ${method} (${ranges(those.map(({ fibre }) => fibre))}); fibre ${worst.fibre}: ${worst.reason}`;
  });
}

function telling({ method, takenShare, gain }: FibreAdvice): number {
  return method === "joint" ? Math.abs(takenShare) : gain;
}
