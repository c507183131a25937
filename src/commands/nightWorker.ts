/** A thread of `hatchel run`: makes what it is asked for, one job at a time. */
import { parentPort } from "node:worker_threads";
import { useThreads } from "../kernels/module.js";
import type { Answer } from "../night/crew.js";
import { MAKERS } from "../night/stages.js";
import type { Job } from "../night/task.js";

useThreads(1);

parentPort?.on("message", async (job: Job) => {
  parentPort?.postMessage(await answer(job));
});

async function answer(job: Job): Promise<Answer> {
  try {
    const make = await MAKERS[job.stage]();
    return { facts: await make(job) };
  } catch (error) {
    const { failureOf } = await import("./failures.js");
    if (process.env.HATCHEL_DEBUG === "1") process.stderr.write(`${(error as Error).stack}\n`);
    return { reason: failureOf(error).message };
  }
}
