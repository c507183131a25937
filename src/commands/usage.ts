/** Wrong use of the command, told in one sentence with its remedy. */
import type { Command, CommanderError } from "commander";

export class UsageError extends Error {
  override readonly name = "UsageError";
}

/** What the parser found wrong, in this program's manner. */
export function usageError(command: Command, { code, message }: CommanderError): UsageError {
  const called = fullName(command);
  const [finding, ...rest] = message.replace(/^error: /, "").split("\n");
  const near = /Did you mean (.*)\?\)/.exec(rest.join(" "))?.[1];
  const lists = code === "commander.unknownCommand" ? "commands" : "options";
  const seeHelp = `'${called} --help' lists the ${lists}`;
  switch (code) {
    case "commander.unknownOption":
    case "commander.unknownCommand":
      return new UsageError(`${called}: ${finding}; ${near ? `did you mean ${near}?` : `${seeHelp}.`}`);
    case "commander.missingArgument":
      return new UsageError(`${called}: ${missingArgument(command, finding)}`);
    case "commander.optionMissingArgument":
      return new UsageError(`${called}: ${quoted(finding)} was given without a value; add it after the option.`);
    case "commander.missingMandatoryOptionValue":
      return new UsageError(`${called}: ${quoted(finding)} is missing; say where to write, or see '${called} --help'.`);
    case "commander.excessArguments":
      return new UsageError(`${called}: ${tooMany(command)}; '${called} --help' shows what it takes.`);
    default:
      return new UsageError(`${called}: ${finding.replace(/\.$/, "")}; see '${called} --help'.`);
  }
}

function fullName(command: Command): string {
  return command.parent ? `${fullName(command.parent)} ${command.name()}` : command.name();
}

/** "error: option '-o, --output <file>' argument missing" → -o, --output <file> */
function quoted(finding: string): string {
  return /'(.*?)'/.exec(finding)?.[1] ?? finding;
}

/** Options that take several files swallow what stands behind them: the usual reason for a frame that "is missing". */
function missingArgument(command: Command, finding: string): string {
  const name = quoted(finding);
  const greedy = command.options.find((option) => option.variadic && command.getOptionValue(option.attributeName()));
  if (greedy === undefined) return `${name} is missing; name the file.`;
  return `${name} is missing; ${greedy.long} takes all the files behind it, so put ${name} in front of it.`;
}

function tooMany(command: Command): string {
  const expected = command.registeredArguments.length;
  const first = command.args[expected];
  return `'${first}' is one argument too many`;
}
