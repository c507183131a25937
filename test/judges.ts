/** Outside programs that judge what this one writes and reads. Each runs in a process of its own.
 * Where they are not installed their tests are skipped, unless HATCHEL_REQUIRE_JUDGES=1 asks for them. */
import { spawnSync } from "node:child_process";
import { existsSync } from "node:fs";

const PYTHON = "/usr/bin/python3";

export type Judge = "fitsverify" | "astropy" | "scipy" | "fpack" | "funpack";

const found = new Map<Judge, boolean>();

/** False when the judge is there; otherwise the reason to skip.
 * @throws Error when it is missing and HATCHEL_REQUIRE_JUDGES=1. */
export function judgeMissing(name: Judge): string | false {
  if (!found.has(name)) found.set(name, isThere(name));
  if (found.get(name)) return false;
  const reason = `${name} is not installed`;
  if (process.env.HATCHEL_REQUIRE_JUDGES === "1")
    throw new Error(`${reason}, and HATCHEL_REQUIRE_JUDGES=1 asks for it.`);
  return reason;
}

function isThere(name: Judge): boolean {
  if (name === "astropy" || name === "scipy") {
    return existsSync(PYTHON) && spawnSync(PYTHON, ["-c", `import ${name}`]).status === 0;
  }
  return spawnSync("sh", ["-c", `command -v ${name}`]).status === 0;
}

/** What `fitsverify` has against the file: every error and warning, one a line; an empty list is a clean bill. */
export function fitsverify(path: string): string[] {
  const run = spawnSync("fitsverify", [path], { encoding: "utf8" });
  if (run.error) throw run.error;
  const text = run.stdout + run.stderr;
  const complaints = text.split("\n").filter((line) => /^\*\*\*\s+(Error|Warning)/i.test(line));
  const verdict = /(\d+) warning\S* and (\d+) error/.exec(text);
  if (verdict === null) return [`no verdict: ${text.trim()}`];
  if (complaints.length === 0 && (verdict[1] !== "0" || verdict[2] !== "0")) return [verdict[0]];
  return complaints;
}

/** Runs a script given as text with `args` and, for much data, `input` on its standard input; returns what it printed.
 * @throws Error with the script's own complaint when it fails. */
export function python(script: string, args: string[] = [], input = ""): string {
  const run = spawnSync(PYTHON, ["-W", "ignore", "-c", script, ...args], {
    encoding: "utf8",
    input,
    maxBuffer: 1 << 28,
  });
  if (run.error) throw run.error;
  if (run.status !== 0) throw new Error(`python3 failed: ${run.stderr}`);
  return run.stdout;
}
