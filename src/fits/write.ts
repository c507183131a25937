/** Files written whole or not at all: to a temporary name in the same folder, then renamed. */
import { randomBytes } from "node:crypto";
import fs from "node:fs";
import { basename, dirname, join } from "node:path";
import { loadKernels } from "../kernels/module.js";
import { addChecksums } from "./checksum.js";
import { encodeHdus, type OutputHdu, planHdus } from "./encode.js";
import { Encoder } from "./encoder.js";
import { FitsError } from "./errors.js";

export interface WriteOptions {
  /** Replace a file that is there already. */
  force?: boolean | undefined;
  /** Files that were read to make this one: they are never written on, `force` or not. */
  inputs?: readonly string[] | undefined;
}

/** Writes `hdus` to `path`; "-" is standard output; what is no plain file (a pipe, a device) is written to directly.
 * @throws FitsError when the file exists and `force` is not given, is one of the inputs, or cannot be written; nothing
 * is left behind then. */
export async function writeFits(path: string, hdus: readonly OutputHdu[], options: WriteOptions = {}): Promise<void> {
  const encoder = new Encoder(await loadKernels());
  if (path === "-") return writeToStandardOutput(hdus, encoder);
  refuseToHarm(path, options);
  const there = fs.statSync(path, { throwIfNoEntry: false });
  if (there !== undefined && !there.isFile()) return failingAsOutput(path, () => writeInOrder(path, hdus, encoder));
  // A link is followed: it is the file behind it that is replaced.
  const target = there === undefined ? path : fs.realpathSync(path);
  const temporary = join(dirname(target), `.${basename(target)}.${randomBytes(6).toString("hex")}.part`);
  failingAsOutput(path, () => {
    try {
      writeInPlaces(temporary, hdus, encoder);
      refuseToHarm(path, options);
      fs.renameSync(temporary, target);
    } catch (error) {
      fs.rmSync(temporary, { force: true });
      throw error;
    }
  });
}

/** Checks, before any work is done, that `writeFits` would be allowed to write there.
 * @throws FitsError as `writeFits`. */
export function refuseToHarm(path: string, options: WriteOptions): void {
  if (path === "-") return;
  const there = failingAsOutput(path, () => fs.statSync(path, { throwIfNoEntry: false, bigint: true }));
  if (there === undefined) return;
  if (there.isDirectory()) throw new FitsError("output", "this is a folder", "name a file in it", { file: path });
  for (const input of options.inputs ?? []) {
    const other = fs.statSync(input, { throwIfNoEntry: false, bigint: true });
    if (other !== undefined && other.dev === there.dev && other.ino === there.ino && there.isFile()) {
      throw new FitsError("output", "the output would be written on an input", "give it another name", { file: path });
    }
  }
  if (there.isFile() && options.force !== true) {
    throw new FitsError("output", "this file exists already", "give another name, or --force to replace it", {
      file: path,
    });
  }
}

/** Into a pipe or a device: one byte behind the other. */
function writeInOrder(path: string, hdus: readonly OutputHdu[], encoder: Encoder): void {
  withNewFile(path, "w", (file) => {
    for (const piece of encodeHdus(hdus, encoder)) writeWhole(file, piece, null);
  });
}

/** Into a file: each header after its data, whose sum it holds, so that they are encoded once. */
function writeInPlaces(path: string, hdus: readonly OutputHdu[], encoder: Encoder): void {
  withNewFile(path, "wx", (file) => {
    let start = 0;
    for (const hdu of planHdus(hdus)) {
      let at = start + hdu.headerBytes;
      let sum = 0;
      for (const piece of hdu.data(encoder)) {
        sum = addChecksums(sum, encoder.sum(piece));
        writeWhole(file, piece, at);
        at += piece.length;
      }
      writeWhole(file, hdu.header(sum), start);
      start = at;
    }
  });
}

function withNewFile(path: string, flags: string, write: (file: number) => void): void {
  const file = fs.openSync(path, flags);
  try {
    write(file);
  } finally {
    fs.closeSync(file);
  }
}

/** @param position in the file; null: where it stands. */
function writeWhole(file: number, piece: Uint8Array, position: number | null): void {
  for (let at = 0; at < piece.length; ) {
    at += fs.writeSync(file, piece, at, piece.length - at, position === null ? null : position + at);
  }
}

async function writeToStandardOutput(hdus: readonly OutputHdu[], encoder: Encoder): Promise<void> {
  const { stdout } = process;
  // A broken pipe is told twice: to the callback, which is heard, and later as an event, which must not end the process.
  const deaf = () => {};
  stdout.on("error", deaf);
  for (const piece of encodeHdus(hdus, encoder)) {
    // A copy: the stream may hold it for longer than the encoder does.
    const held = Buffer.from(piece);
    await new Promise<void>((resolve, reject) => {
      stdout.write(held, (error) => (error ? reject(cannotWrite("standard output", error)) : resolve()));
    });
  }
  stdout.off("error", deaf);
}

function failingAsOutput<T>(path: string, work: () => T): T {
  try {
    return work();
  } catch (error) {
    if (error instanceof FitsError) {
      throw error.file === undefined
        ? new FitsError(error.code, error.finding, error.remedy, { ...error, file: path })
        : error;
    }
    throw cannotWrite(path, error as NodeJS.ErrnoException);
  }
}

const REASONS: Record<string, [finding: string, remedy: string]> = {
  ENOENT: ["the folder does not exist", "make it first"],
  ENOTDIR: ["a part of this path is not a folder", "give another name"],
  EACCES: ["this place may not be written to", "give another name or change its permissions"],
  EROFS: ["this place is read-only", "write elsewhere"],
  ENOSPC: ["the disk is full", "make room or write elsewhere"],
  ENAMETOOLONG: ["the name is too long", "shorten it"],
  EPIPE: ["nobody reads the pipe any more", "keep its reader running"],
};

function cannotWrite(path: string, error: NodeJS.ErrnoException): FitsError {
  const [finding, remedy] = REASONS[error.code ?? ""] ?? [
    `writing failed (${error.code ?? error.message})`,
    "write elsewhere",
  ];
  return new FitsError("output", finding, remedy, { file: path });
}
