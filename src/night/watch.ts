/** Frames taken as they are written to a folder. A frame is taken when it is whole: its name, size and time have stood still
 * between two looks, and all the data that its headers announce are there. Whether it came by copying, slowly, or by being
 * moved there is all the same. The folder is looked at again and again, since not every file system tells of changes. */
import fs from "node:fs";
import { join } from "node:path";
import { setTimeout } from "node:timers/promises";
import { FitsError } from "../fits/errors.js";
import { scanFits } from "../fits/scan.js";
import { openSource } from "../fits/source.js";
import { type FrameHeader, readFrameHeader } from "./frameHeader.js";
import { isFrameName } from "./frameNames.js";

export interface WatchOptions {
  /** Absolute paths of files that have their roles already. */
  known: readonly string[];
  hdu?: number | undefined;
  /** Ends the watch. */
  signal?: AbortSignal | undefined;
  /** Milliseconds between two looks. */
  everyMs?: number;
  onObject: (frame: FrameHeader) => void;
  /** Called with one sentence on a file that is no object frame. */
  onOther: (sentence: string) => void;
}

/** Watches until `signal` says enough. A frame that changes after it was taken is taken again. */
export async function watchFolder(folder: string, options: WatchOptions): Promise<void> {
  const { signal, everyMs = 1000 } = options;
  /** By path: how the file looked, and whether that has been dealt with. */
  const seen = new Map<string, { look: string; done: boolean }>();
  for (const path of options.known) seen.set(path, { look: lookOf(path), done: true });
  while (signal?.aborted !== true) {
    for (const name of fs.readdirSync(folder).filter(isFrameName).sort()) {
      const path = join(folder, name);
      const look = lookOf(path);
      const before = seen.get(path);
      if (look === "" || (before?.look === look && before.done)) continue;
      const stands = before?.look === look;
      const done = stands && (await isWhole(path));
      seen.set(path, { look, done });
      if (done) await take(path, options);
    }
    await setTimeout(everyMs, undefined, signal === undefined ? {} : { signal }).catch(() => {});
  }
}

/** Empty for what is no file. */
function lookOf(path: string): string {
  const stat = fs.statSync(path, { throwIfNoEntry: false });
  return stat?.isFile() ? `${stat.size} ${stat.mtimeMs} ${stat.ino}` : "";
}

/** Whether all that the headers announce is there. */
async function isWhole(path: string): Promise<boolean> {
  try {
    const source = await openSource(path);
    try {
      scanFits(source);
      return true;
    } finally {
      source.close();
    }
  } catch (error) {
    // What is damaged rather than unfinished is told when its header is read.
    return error instanceof FitsError && error.code !== "truncated";
  }
}

async function take(path: string, { hdu, onObject, onOther }: WatchOptions): Promise<void> {
  try {
    const frame = await readFrameHeader(path, undefined, hdu);
    if (frame.kind === "science") return onObject(frame);
    const kind = frame.kind === "unknown" ? "neither IMAGETYP nor OBJECT says what it is" : `it is ${frame.kindFrom}`;
    onOther(`${frame.name}: ${kind}, so it is left alone; only object frames are taken while watching.`);
  } catch (error) {
    if (!(error instanceof FitsError)) throw error;
    onOther(error.message);
  }
}
