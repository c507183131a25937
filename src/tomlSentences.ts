/** What is said about a TOML file that a person wrote: the file, the place in it, what was found and what is wanted, in one
 * sentence. */
import { parse, TomlError } from "smol-toml";
import type { z } from "zod";
import { nearestKey } from "./nearestKey.js";

/** Keys of each table ("" is the top, "*" any name), and what a value must be, in words for a reader. */
export type TomlKeys = Readonly<Record<string, Readonly<Record<string, string>>>>;

type Issue = z.core.$ZodIssue;

/** The text's tree, or a sentence on why there is none. */
export function tomlTree(text: string, file: string): { tree: unknown } | { complaint: string } {
  try {
    return { tree: parse(text) };
  } catch (error) {
    if (!(error instanceof TomlError)) throw error;
    const found = error.message.split("\n")[0].replace(/^Invalid TOML document: /, "");
    return { complaint: `${file}, line ${error.line}: not valid TOML (${found}); correct that line.` };
  }
}

/** One sentence for the first thing that is wrong. */
export function tomlComplaint(file: string, tree: unknown, issue: Issue, keys: TomlKeys): string {
  const table = issue.path.filter((step) => typeof step === "string").join(".");
  if (issue.code === "unrecognized_keys") {
    const key = issue.keys[0];
    const known = Object.keys(keys[table] ?? {});
    const near = nearestKey(key, known);
    const remedy = near ? `did you mean '${near}'?` : `known there: ${known.join(", ")}.`;
    return `${file}: unknown key '${spelled([...issue.path, key])}'; ${remedy}`;
  }
  const names = issue.path.filter((step): step is string => typeof step === "string");
  const known = keys[names.slice(0, -1).join(".")];
  const expected = known?.[names[names.length - 1]] ?? known?.["*"] ?? "a table";
  const value = valueAt(tree, issue.path);
  if (value === undefined) return `${file}: '${spelled(issue.path)}' is missing; add ${expected}.`;
  const found = JSON.stringify(value, (_key, part) => (typeof part === "bigint" ? String(part) : part));
  return `${file}: '${spelled(issue.path)}' is ${found}, but ${expected} was expected; correct it or leave the key out.`;
}

/** detector.amplifier[2].gain, counted from 1 as people do. */
function spelled(path: readonly PropertyKey[]): string {
  return path.reduce<string>((text, step) => {
    if (typeof step === "number") return `${text}[${step + 1}]`;
    return text === "" ? String(step) : `${text}.${String(step)}`;
  }, "");
}

function valueAt(tree: unknown, path: readonly PropertyKey[]): unknown {
  let here = tree;
  for (const step of path) here = (here as Record<PropertyKey, unknown> | undefined)?.[step];
  return here;
}
