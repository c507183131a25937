/** hatchel run: a night plan to its products. */
import { availableParallelism } from "node:os";
import type { Command } from "commander";
import { mostThreads } from "../kernels/module.js";
import { Crew } from "../night/crew.js";
import type { Ending } from "../night/engine.js";
import type { Ledger } from "../night/ledger.js";
import { readPlan } from "../night/plan.js";
import { planKeyLines } from "../night/planKeys.js";
import { type NightOutcome, runNight } from "../night/run.js";
import { type FrameSummary, productOf, reasonOf } from "../night/summary.js";
import type { Task } from "../night/task.js";
import { addCommonOptions, outputOption, threadsOption } from "./frameOptions.js";
import { type NightProgress, openNightProgress } from "./nightProgress.js";
import { type CommonOptions, type Outcome, perform } from "./perform.js";
import { counted, fixed, percentage, textTable } from "./textTable.js";
import { UsageError } from "./usage.js";
import { version } from "./version.js";

interface RunCommandOptions extends CommonOptions {
  output: string;
  watch?: boolean;
}

const HELP = `
Each product is made once, and kept while the bytes of all that goes into it, its options and the program are unchanged; run
again after an interruption, or with another plan, and only what is missing or changed is made. Frames that fail are told, the
others finished; the exit code is then 1. Wavelengths are the observer's: velocities, fluxes in absolute units and the
atmosphere's bands are left to what comes after.

Keys of the plan:`;

export function addRun(command: Command): void {
  command
    .description("Carries out a night plan: calibrations once, then spectra of every object frame, several at once.")
    .argument("<PLAN.toml>", "the night plan, as 'hatchel plan' proposes one")
    .addOption(outputOption("products", false).makeOptionMandatory())
    .option("--watch", "go on with object frames as they are written to the plan's folder, until interrupted")
    .addOption(threadsOption())
    .addHelpText("after", () => [HELP, ...planKeyLines().map((line) => `  ${line}`)].join("\n"));
  addCommonOptions(command).action((file: string, options: RunCommandOptions) =>
    perform("run", options, () => run(file, options)),
  );
}

async function run(file: string, options: RunCommandOptions): Promise<Outcome<"run">> {
  if (options.output === "-") {
    throw new UsageError("hatchel run: -o is -, but a night has many products; give -o a folder's name.");
  }
  const plan = await readPlan(file);
  const progress = await openNightProgress(options.quiet === true);
  const atOnce = options.threads ?? Math.min(availableParallelism(), mostThreads);
  const crew = new Crew(new URL("./nightWorker.js", import.meta.url));
  const interrupts = heedInterrupts(options.watch === true);
  try {
    const outcome = await runNight(plan, options.output, {
      ...{ version, atOnce, watch: options.watch === true, signal: interrupts.signal },
      make: (job) => crew.make(job),
      onOpen: interrupts.hold,
      onBegin: (tasks) => progress.begin(tasks),
      onStart: (task) => progress.start(task),
      onEnd: (task, ending) => told(task, ending, options, progress),
      onOther: (sentence) => sayLine(sentence, options, progress),
    });
    return outcomeOf(outcome, options.output);
  } finally {
    interrupts.release();
    progress.stop();
    await crew.end();
  }
}

/** A watch ends at the first interrupt, with what is being made finished. A run ends at once, and takes its half-made
 * products with it; so does a watch at the second one. */
function heedInterrupts(watches: boolean) {
  const controller = new AbortController();
  let ledger: Ledger | undefined;
  const heed = (signal: NodeJS.Signals) => {
    if (watches && !controller.signal.aborted) {
      controller.abort();
      return;
    }
    ledger?.close();
    release();
    process.kill(process.pid, signal);
  };
  const release = () => {
    for (const signal of ["SIGINT", "SIGTERM"] as const) process.off(signal, heed);
  };
  for (const signal of ["SIGINT", "SIGTERM"] as const) process.on(signal, heed);
  const hold = (held: Ledger) => {
    ledger = held;
  };
  return { signal: controller.signal, hold, release };
}

/** While watching, each product is told when it is there. */
function told(task: Task, ending: Ending, options: RunCommandOptions, progress: NightProgress): void {
  progress.end(task);
  if (options.watch !== true || ending.state === "left") return;
  const product = productOf(task);
  const reason = reasonOf(ending);
  sayLine(reason === null ? `${product}: ${ending.state}` : `${product}: failed: ${reason}`, options, progress);
}

function sayLine(line: string, { quiet, json }: RunCommandOptions, progress: NightProgress): void {
  if (quiet) return;
  if (process.stderr.isTTY) progress.say(line);
  else (json ? process.stderr : process.stdout).write(`${line}\n`);
}

function outcomeOf({ summary, endings }: NightOutcome, output: string): Outcome<"run"> {
  const states = [...endings.values()].map(({ state }) => state);
  const made = states.filter((state) => state === "made").length;
  const kept = states.filter((state) => state === "kept").length;
  const { night, version: _version, calibrations, frames, derived, nFailed, assumptions, warnings } = summary;
  const failed = frames.filter(({ verdict }) => verdict === "failed");
  const lost = (list: typeof derived) =>
    list.filter((one) => !one.made).map(({ product, reason }) => `failed: ${product}: ${reason}`);
  const failures = [
    ...lost(calibrations),
    ...failed.map(({ frame, reasons }) => `failed: ${frame}: ${reasons.join(" ")}`),
    ...lost(derived),
  ];
  const doubts = frames
    .filter(({ verdict }) => verdict === "doubtful" || verdict === "bad")
    .map(({ frame, verdict, reasons }) => `${verdict}: ${frame}: ${reasons.join("; ")}.`);
  const count = `${frames.length - failed.length} of ${counted(frames.length, "object frame")} extracted`;
  const text = [
    `${output}: ${night}: ${count}, ${counted(made, "product")} made, ${kept} kept`,
    ...(frames.length > 0 ? [frameTable(frames)] : []),
    ...failures,
    ...doubts,
  ].join("\n");
  const json = { output, night, made, kept, calibrations, frames, derived, failed: nFailed, assumptions, warnings };
  if (nFailed === 0) return { json, text };
  const what = `${counted(nFailed, "product")} could not be made`;
  return {
    json,
    text,
    failed: `${what}; ${(failures[0] ?? "").replace(/^failed: /, "the first is ").replace(/\.$/, "")}`,
  };
}

/** Columns that no frame has a value for are left out. */
function frameTable(frames: FrameSummary[]): string {
  const columns: [heading: string, cell: (frame: FrameSummary) => string][] = [
    ["frame", ({ frame }) => frame],
    ["object", ({ object }) => object],
    ["S/N", (one) => fixed(one.medianSignalToNoise, 1)],
    ["shift px", (one) => fixed(one.shiftPixels, 3)],
    ["zero point px", (one) => fixed(one.zeroPointPixels, 3)],
    ["rejected", (one) => (one.rejectedPixels === null ? "–" : String(one.rejectedPixels))],
    ["usable", (one) => percentage(one.usableShare)],
    ["sky left", (one) => percentage(one.skyResidual)],
    ["sky pull", (one) => fixed(one.skyPullAtLines, 2)],
    ["verdict", ({ verdict }) => verdict],
  ];
  const shown = columns.filter(([, cell]) => frames.some((frame) => cell(frame) !== "–"));
  return textTable([shown.map(([heading]) => heading), ...frames.map((frame) => shown.map(([, cell]) => cell(frame)))]);
}
