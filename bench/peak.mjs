// The most memory that a process ever held.
import { spawnSync } from "node:child_process";
import { readFileSync, rmSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { fileURLToPath } from "node:url";

/** Bytes. @param {string[]} args what Node is to run */
export function peakOf(args) {
  const file = join(tmpdir(), `hatchel-bench-peak-${process.pid}.txt`);
  const preload = fileURLToPath(new URL("./peak.cjs", import.meta.url));
  const env = { ...process.env, HATCHEL_BENCH_PEAK: file };
  const run = spawnSync(process.execPath, ["--require", preload, ...args], { encoding: "utf8", env });
  if (run.status !== 0) throw new Error(`${args[1] ?? args[0]} failed: ${run.stderr}`);
  const bytes = 1024 * Number(readFileSync(file, "utf8"));
  rmSync(file);
  return bytes;
}
