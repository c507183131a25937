/** The command line: its commands, its help, and how it ends.
 *
 * Exit codes: 0 done; 1 the job failed (a bad file, a refusal); 2 wrong use, the bare command without arguments too, which
 * prints its help: a script that calls it so has lost its arguments. */
import { Command, CommanderError } from "commander";
import { addCompare } from "./compare.js";
import { addDemo } from "./demo.js";
import { addExtract } from "./extract.js";
import { failureOf } from "./failures.js";
import { addLook } from "./look.js";
import { jsonText, ReportedFailure } from "./perform.js";
import { addRecover } from "./recover.js";
import { addSimulate } from "./simulate.js";
import { addTrace } from "./trace.js";
import { UsageError, usageError } from "./usage.js";
import { addVerify } from "./verify.js";
import { version } from "./version.js";

/** Runs one command line (without node and script); returns the exit code. Never throws. */
export async function runCommandLine(args: readonly string[]): Promise<number> {
  const program = makeProgram();
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
    return tell(error, args, program);
  }
}

function makeProgram(): Command {
  const program = new Command("hatchel")
    .description("Turns raw frames of a fibre-fed spectrograph into one spectrum per fibre with honest error bars.")
    .version(version, "--version", "print the version")
    .helpOption("--help", "print this help")
    .helpCommand("help [command]", "print the help of a command")
    .addHelpText("after", ENDING);
  for (const add of [addDemo, addSimulate, addLook, addTrace, addExtract, addCompare, addVerify, addRecover])
    add(program);
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

function tell(error: unknown, args: readonly string[], program: Command): number {
  if (error instanceof ReportedFailure) {
    process.stderr.write(`hatchel: ${error.message}.\n`);
    return 1;
  }
  const failure = failureOf(error);
  if (args.includes("--json")) {
    const known = program.commands.some((command) => command.name() === args[0]);
    process.stdout.write(jsonText(known ? args[0] : null, { error: failure }));
  }
  process.stderr.write(`${/^hatchel[ :]/.test(failure.message) ? "" : "hatchel: "}${failure.message}\n`);
  if (process.env.HATCHEL_DEBUG === "1" && error instanceof Error) process.stderr.write(`${error.stack}\n`);
  return failure.exitCode;
}
