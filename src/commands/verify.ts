/** hatchel verify: kernels against their plain-TypeScript reference on one's own frame. */
import type { Command } from "commander";
import { type Verification, verifyExtraction } from "../extraction/verify.js";
import {
  addCommonOptions,
  addFrameOptions,
  addTramlineOptions,
  type FrameOptions,
  namingOptions,
  refineOption,
  type TramlineOptions,
} from "./frameOptions.js";
import { inputPaths, oneOfEach, openBench, readFrame, requireTramlineSource, tramlinesFor } from "./frames.js";
import { type Outcome, perform } from "./perform.js";
import type { Progress } from "./progress.js";
import { textTable } from "./textTable.js";

interface VerifyOptions extends FrameOptions, TramlineOptions {
  refine: boolean;
}

export function addVerify(command: Command): void {
  command
    .description(
      "Runs the fast kernels and the plain reference on the same frame and shows the largest differences. Exit code 1 when a bound is broken.",
    )
    .argument("<FRAME>", "the raw frame; - is standard input");
  addTramlineOptions(command).addOption(refineOption());
  addCommonOptions(addFrameOptions(command)).action((frame: string, options: VerifyOptions) =>
    perform("verify", options, (progress) => verify(frame, options, progress)),
  );
}

async function verify(path: string, options: VerifyOptions, progress: Progress): Promise<Outcome<"verify">> {
  requireTramlineSource("verify", options);
  const bench = await openBench(inputPaths([path], options), options, progress);
  const frame = await readFrame(path, "science", bench);
  const traced = await tramlinesFor(frame, options, bench, progress);
  progress.stage(`verifying on ${frame.name}`);
  const verification = await verifyExtraction(frame, traced.tramlines, {
    ...namingOptions(options),
    refine: options.refine,
    onProgress: progress.share,
  });
  return {
    json: {
      frame: frame.name,
      ...verification,
      assumptions: oneOfEach([...frame.assumptions, ...traced.assumptions]),
      warnings: oneOfEach([...frame.warnings, ...traced.warnings]),
    },
    text: page(frame.name, verification),
    ...(verification.passed ? {} : { failed: "kernels and reference differ by more than rounding explains" }),
  };
}

function page(name: string, { worstWeight, checks, passed }: Verification): string {
  const heading = ["method", "type", "points", "|Δf|/(f+σ)", "|Δf|/σ", "of bound", "|Δvar|/var", "pixels", "flags", ""];
  const rows = checks.map((check) => [
    `${check.method}${check.method === "joint" ? "" : check.crosstalkCorrected ? ", corrected" : ", uncorrected"}`,
    check.precision,
    String(check.nPoint),
    ...[check.worstRelative, check.worstSigma, check.worstOverBound, check.worstVariance].map((v) =>
      v.toExponential(1),
    ),
    String(check.rejectedDiffer),
    String(check.flagsDiffer),
    check.passed ? "good" : "WRONG",
  ]);
  return [
    `${name}: largest differences of the kernels from their reference`,
    textTable([heading, ...rows]),
    `  profile weights: ${worstWeight.toExponential(1)}`,
    "pixels: rejected as cosmic rays by one and not by the other; flags: points flagged otherwise.",
    passed
      ? "Kernels and reference agree within their bounds."
      : "Kernels and reference DISAGREE; do not use these spectra.",
  ].join("\n");
}
