/** The command line: its commands, its help, and how it ends.
 *
 * Exit codes: 0 done; 1 the job failed (a bad file, a refusal); 2 wrong use, the bare command without arguments too, which
 * prints its help: a script that calls it so has lost its arguments. */
import { Command, CommanderError } from "commander";
import { contents } from "./contents.js";
import { jsonText, ReportedFailure, startKernels } from "./perform.js";
import { UsageError, usageError } from "./usage.js";
import { version } from "./version.js";

/** Runs one command line (without node and script); returns the exit code. Never throws. */
export async function runCommandLine(args: readonly string[]): Promise<number> {
  const program = await makeProgram(args);
  if (args.length === 0) {
    program.outputHelp();
    return 2;
  }
  try {
    await program.parseAsync(args, { from: "user" });
    return 0;
  } catch (error) {
    // Help and version are thrown too.
    if (error instanceof CommanderError && error.exitCode === 0) return 0;
    return await tell(error, args, program);
  }
}

/** All commands by name; the one that `args` ask for in full. */
async function makeProgram(args: readonly string[]): Promise<Command> {
  const program = new Command("hatchel")
    .description("Turns raw frames of a fibre-fed spectrograph into one spectrum per fibre with honest error bars.")
    .version(version, "--version", "print the version")
    .helpOption("--help", "print this help")
    .helpCommand("help [command]", "print the help of a command")
    .addHelpText("after", ENDING);
  const words = args.filter((word) => !word.startsWith("-"));
  const asked = words[0] === "help" ? words[1] : words[0];
  const helps = words[0] === "help" || args.includes("--help");
  for (const { name, takes, summary, define, works } of contents) {
    const command = program.command(name).summary(summary);
    if (name !== asked) {
      // Enough for the list of commands, where every one shows that it has options.
      if (takes !== "") command.argument(takes);
      command.option("--json");
      continue;
    }
    // Threads take as long to start as the command's module to load.
    if (works && !helps && !args.some((word) => word.startsWith("--threads"))) startKernels();
    await define(command);
    if (helps) command.addHelpText("after", (await import("./json.js")).jsonHelp(name));
  }
  for (const command of [program, ...program.commands]) {
    command.helpOption("--help", "print this help");
    command.configureOutput({ outputError() {} });
    command.exitOverride((error) => {
      throw error.exitCode === 0 || error instanceof UsageError ? error : usageError(command, error);
    });
  }
  return program;
}

const ENDING = `
Exit codes: 0 done; 1 the job failed, with the reason in one sentence; 2 wrong use.
Every command takes --json; 'hatchel COMMAND --help' lists the keys. Set HATCHEL_DEBUG=1 to see where a defect lies.`;

async function tell(error: unknown, args: readonly string[], program: Command): Promise<number> {
  if (error instanceof ReportedFailure) {
    process.stderr.write(`hatchel: ${error.message}.\n`);
    return 1;
  }
  const { failureOf } = await import("./failures.js");
  const failure = failureOf(error);
  if (args.includes("--json")) {
    const known = program.commands.some((command) => command.name() === args[0]);
    process.stdout.write(jsonText(known ? args[0] : null, { error: failure }));
  }
  process.stderr.write(`${/^hatchel[ :]/.test(failure.message) ? "" : "hatchel: "}${failure.message}\n`);
  if (process.env.HATCHEL_DEBUG === "1" && error instanceof Error) process.stderr.write(`${error.stack}\n`);
  return failure.exitCode;
}
