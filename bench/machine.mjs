// What the timings were taken on.
import { readFileSync } from "node:fs";
import { cpus, totalmem } from "node:os";
import { timeInTurns } from "./timing.mjs";

export function machine() {
  const processors = cpus();
  return {
    processor: (processors[0]?.model ?? "unknown processor").trim(),
    nProcessor: processors.length,
    architecture: process.arch,
    memoryGiB: Math.round(totalmem() / 2 ** 30),
    node: process.version,
    date: new Date().toISOString().slice(0, 10),
    version: JSON.parse(readFileSync(new URL("../package.json", import.meta.url), "utf8")).version,
  };
}

/** Bytes a millisecond that one thread reads and writes when it copies an array far larger than any cache. */
export function copyRate() {
  const from = new Float64Array(2 ** 24).fill(1.5); // 128 MiB
  const to = new Float64Array(from.length);
  const { copy } = timeInTurns({
    copy: () => {
      to.set(from);
      return to[to.length - 1];
    },
  });
  return (2 * from.byteLength) / copy.median;
}

/** Milliseconds that the system takes to give a fresh MiB at its first touch: what a cold process pays for all it holds. */
export function firstTouch() {
  const mebibytes = 64;
  const began = performance.now();
  const fresh = new Float64Array(mebibytes * 2 ** 17);
  for (let at = 0; at < fresh.length; at += 512) fresh[at] = 1; // a page is 4096 bytes
  return (performance.now() - began) / mebibytes;
}
