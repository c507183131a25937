// Timing by tinybench, in turns: everyone runs once in each round, so that what slows the machine for a while slows all, and
// ratios are taken within a round. What is reported is the median of the rounds.
import { Bench } from "tinybench";

/** Where results go, so that no engine may leave out the work that makes them. */
export const sink = { sum: 0 };

/** Of the process and all its threads, milliseconds. */
function processorTime() {
  const { user, system } = process.cpuUsage();
  return (user + system) / 1000;
}

/** @type {() => number} */
let now = () => performance.now();

/** For a machine that is busy with other work: time on the processor instead of the clock's. Threads do not pay then. */
export function countProcessorTime() {
  now = processorTime;
}

/** @returns {"clock" | "processor"} */
export function whichTime() {
  return now === processorTime ? "processor" : "clock";
}

/** Milliseconds that `work` takes, of whichever time is counted. @param {() => Promise<unknown>} work */
export async function timeAwaited(work) {
  const began = now();
  await work();
  return now() - began;
}

/** @typedef {{ median: number, least: number, rounds: number[] }} Timing milliseconds a call */

/** @param {Record<string, () => number>} tasks
 * @param {{ rounds?: number, milliseconds?: number }} [effort] rounds, and how long to repeat a task in each (0: once).
 * @returns {Record<string, Timing>} */
export function timeInTurns(tasks, { rounds = 7, milliseconds = 0 } = {}) {
  const taken = Object.fromEntries(Object.keys(tasks).map((name) => [name, /** @type {number[]} */ ([])]));
  for (let round = -1; round < rounds; round++) {
    for (const [name, task] of Object.entries(tasks)) {
      const median = timeOnce(name, task, milliseconds);
      if (round >= 0) taken[name].push(median); // the round before the first warms up
    }
  }
  return Object.fromEntries(Object.entries(taken).map(([name, times]) => [name, timing(times)]));
}

function timeOnce(name, task, milliseconds) {
  const bench = new Bench({ iterations: 1, time: milliseconds, warmup: false, throws: true, now });
  bench.add(name, () => {
    sink.sum += task();
  });
  const [{ result }] = bench.runSync();
  if (result.state !== "completed") throw new Error(`${name}: the timing ended as ${result.state}.`);
  return result.latency.p50;
}

/** @param {number[]} rounds @returns {Timing} */
export function timing(rounds) {
  return { median: median(rounds), least: Math.min(...rounds), rounds };
}

/** How many times as long `slow` takes as `fast`: the median of the rounds' ratios; of medians when rounds were apart.
 * @param {Timing} slow @param {Timing} fast */
export function ratio(slow, fast) {
  if (slow.rounds.length !== fast.rounds.length) return slow.median / fast.median;
  return median(slow.rounds.map((time, round) => time / fast.rounds[round]));
}

/** @param {number[]} values */
export function median(values) {
  const sorted = Float64Array.from(values).sort();
  const half = sorted.length >> 1;
  return sorted.length % 2 ? sorted[half] : (sorted[half - 1] + sorted[half]) / 2;
}
