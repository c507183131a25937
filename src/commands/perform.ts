/** Runs a command's work and says what came of it: a report for people or one JSON object on standard output, what was
 * assumed and what looks wrong on standard error. */
import { availableParallelism } from "node:os";
import { loadKernels, mostThreads, useThreads } from "../kernels/module.js";
import type { CommandName, JsonOf } from "./json.js";
import { openProgress, type Progress } from "./progress.js";
import { UsageError } from "./usage.js";
import { version } from "./version.js";

export interface CommonOptions {
  json?: boolean;
  quiet?: boolean;
  threads?: number;
  /** "-": the product goes to standard output, the report to standard error. */
  output?: string;
}

export interface Outcome<C extends CommandName> {
  json: JsonOf<C>;
  /** For people; ends without a line break. */
  text: string;
  /** Why the report is bad news, in one sentence without its full stop: exit code 1. */
  failed?: string;
}

/** The report has been printed; what it reports is a failure. */
export class ReportedFailure extends Error {
  override readonly name = "ReportedFailure";
}

function usualThreads(): number {
  return Math.min(availableParallelism(), mostThreads);
}

/** Has the kernels compile, and threads start, while the command's own module is loaded and files are looked at. Whoever needs
 * them hears if that fails. */
export function startKernels(): void {
  useThreads(usualThreads());
  loadKernels().catch(() => {});
}

export async function perform<C extends CommandName>(
  command: C,
  options: CommonOptions,
  work: (progress: Progress) => Promise<Outcome<C>>,
): Promise<void> {
  if (options.json && options.output === "-") {
    throw new UsageError(`hatchel ${command}: --json and -o - both write to standard output; give -o a file's name.`);
  }
  useThreads(options.threads ?? usualThreads());
  const progress = await openProgress(options.quiet === true);
  let outcome: Outcome<C>;
  try {
    outcome = await work(progress);
  } finally {
    progress.end();
  }
  const { json, text } = outcome;
  if (!options.quiet) {
    for (const sentence of json.assumptions) process.stderr.write(`assumed: ${sentence}\n`);
    for (const sentence of json.warnings) process.stderr.write(`warning: ${sentence}\n`);
  }
  if (options.json) process.stdout.write(jsonText(command, json));
  else if (!options.quiet) (options.output === "-" ? process.stderr : process.stdout).write(`${text}\n`);
  if (outcome.failed !== undefined) throw new ReportedFailure(outcome.failed);
}

/** The object as it is printed; NaN, which JSON lacks, becomes null. */
export function jsonText(command: string | null, fields: object): string {
  return `${JSON.stringify({ hatchel: version, format: 1, command, ...fields }, plainArrays, 2)}\n`;
}

function plainArrays(_key: string, value: unknown): unknown {
  return ArrayBuffer.isView(value) ? Array.from(value as Float64Array) : value;
}
