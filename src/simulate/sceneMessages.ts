/** What is said about a scene that cannot be used. */
import type { z } from "zod";

/** What is wrong with a scene: the file, the place in it, what was found and what is wanted, in one sentence. */
export class SceneError extends Error {
  override name = "SceneError";
}

type Issue = z.core.$ZodIssue;

/** The first complaint about a scene called `name`, and how many more there are. */
export function sentence(issues: Issue[], name: string): string {
  const [first, ...others] = issues;
  const more = others.length > 0 ? ` (and ${others.length} more like it)` : "";
  return `${name}: ${placeOf(first.path)}: ${complaintOf(first)}${more}`;
}

/** ["detector", "amplifier", 0, "gain"] → detector.amplifier[1].gain: people count from 1. */
function placeOf(path: PropertyKey[]): string {
  const text = path.map((part) => (typeof part === "number" ? `[${part + 1}]` : `.${String(part)}`)).join("");
  return text.replace(/^\./, "") || "top level";
}

function complaintOf(issue: Issue): string {
  if (issue.code === "unrecognized_keys") {
    return `found the unknown ${issue.keys.length > 1 ? "keys" : "key"} ${issue.keys.join(", ")}; correct the spelling or leave it out`;
  }
  if (issue.input === undefined) return `missing, ${wantedOf(issue)}; add it`;
  const found = JSON.stringify(issue.input, (_key, value) => (typeof value === "bigint" ? String(value) : value));
  return `found ${found?.slice(0, 60)}, ${wantedOf(issue)}; correct the value`;
}

/** The schema's message in the words of a person who writes TOML. */
function wantedOf(issue: Issue): string {
  return issue.message
    .replace(/^(Invalid|Too)[a-z ]*(: |$)/, "")
    .replace(/, received .*$/, "")
    .replace(/(number|int|array|string) to (be|have) (?=[<>])/, "")
    .replace(/>=/, "at least ")
    .replace(/<=/, "at most ")
    .replace(/>/, "more than ")
    .replace(/</, "less than ")
    .replace(/expected (tuple|array)/, "expected a list")
    .replace(/expected object/, "expected a table")
    .replace(/expected int$/, "expected a whole number")
    .replace(/expected number/, "expected a number")
    .replace(/expected string/, "expected a text")
    .replace(/expected boolean/, "expected true or false")
    .replace(/^$/, "expected another kind of value");
}
