/** What the timings were taken on, printed once by each suite. */
import { cpus } from "node:os";

export function printMachine(suite: string): void {
  const processors = cpus();
  console.log(
    `${suite}: ${processors[0]?.model ?? "unknown processor"} (${processors.length}), Node ${process.version}`,
  );
}

/** Where results go, so that no engine may leave out the work that makes them. */
export const sink = { sum: 0 };
