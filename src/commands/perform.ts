/** Runs a command's work and says what came of it: a report for people or one JSON object on standard output, what was
 * assumed and what looks wrong on standard error. */
import { openProgress, type Progress } from "./progress.js";
import { UsageError } from "./usage.js";
import { version } from "./version.js";

export interface CommonOptions {
  json?: boolean;
  quiet?: boolean;
  /** "-": the product goes to standard output, the report to standard error. */
  output?: string;
}

export interface Outcome {
  /** Its keys are those of the command's schema in json.ts, without the first three. */
  json: { assumptions: string[]; warnings: string[] };
  /** For people; ends without a line break. */
  text: string;
}

export async function perform(
  command: string,
  options: CommonOptions,
  work: (progress: Progress) => Promise<Outcome>,
): Promise<void> {
  if (options.json && options.output === "-") {
    throw new UsageError(`hatchel ${command}: --json and -o - both write to standard output; give -o a file's name.`);
  }
  const progress = openProgress(options.quiet === true);
  let outcome: Outcome;
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
}

/** The object as it is printed; NaN, which JSON lacks, becomes null. */
export function jsonText(command: string | null, fields: object): string {
  return `${JSON.stringify({ hatchel: version, format: 1, command, ...fields }, plainArrays, 2)}\n`;
}

function plainArrays(_key: string, value: unknown): unknown {
  return ArrayBuffer.isView(value) ? Array.from(value as Float64Array) : value;
}
