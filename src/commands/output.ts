/** Where products go: checked before the long work, whole or absent afterwards. */
import { randomBytes } from "node:crypto";
import fs from "node:fs";
import { basename, dirname, join } from "node:path";
import { FitsError } from "../fits/errors.js";
import { refuseToHarm, type WriteOptions } from "../fits/write.js";
import { UsageError } from "./usage.js";

/** Refuses early what writing would refuse late.
 * @throws FitsError when the file is there and may not be replaced, is one of the inputs, or has no folder to go to; UsageError
 * for a terminal. */
export function checkOutput(path: string, options: WriteOptions): void {
  if (path === "-") {
    refuseTerminal();
    return;
  }
  refuseToHarm(path, options);
  const there = fs.statSync(path, { throwIfNoEntry: false });
  if (there !== undefined && !there.isFile()) return;
  const folder = dirname(there === undefined ? path : fs.realpathSync(path));
  const parent = fs.statSync(folder, { throwIfNoEntry: false });
  const refusal = (finding: string, remedy: string) => new FitsError("output", finding, remedy, { file: path });
  if (parent === undefined) throw refusal(`the folder ${folder} does not exist`, "make it first");
  try {
    fs.accessSync(folder, fs.constants.W_OK);
  } catch {
    throw refusal(`the folder ${folder} may not be written to`, "give another name or change its permissions");
  }
}

function refuseTerminal(): void {
  if (!process.stdout.isTTY) return;
  throw new UsageError(
    "hatchel: standard output is a terminal, which cannot show a FITS file; give -o a file's name, or pipe it on.",
  );
}

/** Writes while interrupts wait, so that what is begun gets finished. Several files are written with a call of `pause`
 * between two of them: there, and at the end, an interrupt that came meanwhile ends the program. */
export async function uninterrupted<T>(write: (pause: () => Promise<void>) => Promise<T>): Promise<T> {
  let caught: NodeJS.Signals | undefined;
  const wait = (signal: NodeJS.Signals) => {
    caught = signal;
  };
  const release = () => {
    for (const signal of ["SIGINT", "SIGTERM"] as const) process.off(signal, wait);
  };
  const pause = async () => {
    // A signal that came during a write is delivered in the event loop's next turn.
    await new Promise((resolve) => setTimeout(resolve, 0));
    if (caught === undefined) return;
    release();
    process.kill(process.pid, caught);
  };
  for (const signal of ["SIGINT", "SIGTERM"] as const) process.on(signal, wait);
  try {
    return await write(pause);
  } finally {
    await pause();
    release();
  }
}

/** Text to a temporary name in the same folder, then renamed.
 * @throws FitsError as `checkOutput`. */
export function writeText(path: string, text: string, options: WriteOptions): void {
  checkOutput(path, options);
  const there = fs.statSync(path, { throwIfNoEntry: false });
  if (there !== undefined && !there.isFile()) {
    fs.writeFileSync(path, text);
    return;
  }
  const target = there === undefined ? path : fs.realpathSync(path);
  const temporary = join(dirname(target), `.${basename(target)}.${randomBytes(6).toString("hex")}.part`);
  try {
    fs.writeFileSync(temporary, text, { flag: "wx" });
    fs.renameSync(temporary, target);
  } catch (error) {
    fs.rmSync(temporary, { force: true });
    throw error;
  }
}
