/** What a run is doing and how long it will take, on standard error, for a person at a terminal only. */
import type { SingleBar } from "cli-progress";
import type { Task } from "../night/task.js";

export interface NightProgress {
  begin(tasks: readonly Task[]): void;
  start(task: Task): void;
  end(task: Task): void;
  /** Prints a line above the bar. */
  say(line: string): void;
  stop(): void;
}

const LEAST_WIDTH = 20;

export async function openNightProgress(quiet: boolean): Promise<NightProgress> {
  if (quiet || !process.stderr.isTTY) return { begin() {}, start() {}, end() {}, say() {}, stop() {} };
  const { default: progress } = await import("cli-progress");
  let bar: SingleBar | undefined;
  const effort = new Map<string, number>();
  const running = new Set<Task>();
  let done = 0;
  const began = performance.now();
  const show = () => {
    const total = [...effort.values()].reduce((sum, one) => sum + one, 0);
    const seconds = (performance.now() - began) / 1000;
    const left = done > 0 ? `${Math.ceil((seconds * (total - done)) / done)} s left` : "";
    const doing = [...running].map(({ label }) => label).join(", ");
    bar?.update(Math.round((1000 * done) / Math.max(total, 1e-9)), { doing: fitted(doing), left });
  };
  return {
    begin(tasks) {
      for (const task of tasks) effort.set(task.id, task.effort);
      bar = new progress.SingleBar({
        format: "{bar} {percentage} %  {left}  {doing}",
        stream: process.stderr,
        clearOnComplete: true,
        hideCursor: false,
        gracefulExit: false,
        linewrap: true,
        barsize: LEAST_WIDTH,
      });
      bar.start(1000, 0, { doing: "", left: "" });
    },
    start(task) {
      effort.set(task.id, task.effort);
      running.add(task);
      show();
    },
    end(task) {
      running.delete(task);
      effort.set(task.id, task.effort);
      done += task.effort;
      show();
    },
    say(line) {
      bar?.stop();
      process.stderr.write(`${line}\n`);
    },
    stop() {
      bar?.stop();
      bar = undefined;
    },
  };
}

/** Cut to what is left of the terminal's line. */
function fitted(text: string): string {
  const room = Math.max(LEAST_WIDTH, (process.stderr.columns ?? 80) - LEAST_WIDTH - 24);
  return text.length <= room ? text : `${text.slice(0, room - 1)}…`;
}
