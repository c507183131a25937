/** Where the bytes of a FITS file come from: a path, bytes in memory, standard input ("-"); gzip is seen by its magic
 * number, whatever the name. Plain files are read piece by piece, on demand; nothing is ever written. */
import fs from "node:fs";
import { gunzipSync } from "node:zlib";
import { FitsError } from "./errors.js";

export interface Source {
  /** What to call it in messages: the path as given. */
  readonly name: string;
  /** Bytes, after decompression. */
  readonly size: number;
  /** Fills `target` from `offset` on.
   * @throws FitsError when the file ends before. */
  readInto(target: Uint8Array, offset: number): void;
  close(): void;
}

/** Opens a path, "-", or bytes that lie in memory already. `name`: what to call bytes in messages.
 * @throws FitsError when it cannot be read or does not unpack. */
export async function openSource(input: string | Uint8Array, name?: string): Promise<Source> {
  if (typeof input !== "string") return fromBytes(input, name ?? "bytes");
  if (input === "-") return fromBytes(await readStandardInput(), name ?? "standard input");
  return failingAsUnreadable(name ?? input, () => fromPath(input, name ?? input));
}

function fromPath(path: string, name: string): Source {
  const file = fs.openSync(path, "r");
  try {
    const stat = fs.fstatSync(file);
    if (stat.isDirectory()) throw new FitsError("unreadable", "this is a folder", "name a file in it", { file: name });
    if (stat.isCharacterDevice() || stat.isBlockDevice()) {
      throw new FitsError("unreadable", "this is a device", "give a FITS file", { file: name });
    }
    const magic = Buffer.alloc(2);
    if (!stat.isFile() || (fs.readSync(file, magic, 0, 2, 0) === 2 && isGzip(magic))) {
      const source = fromBytes(fs.readFileSync(file), name);
      fs.closeSync(file);
      return source;
    }
    return new FileSource(name, stat.size, file);
  } catch (error) {
    fs.closeSync(file);
    throw error;
  }
}

class FileSource implements Source {
  constructor(
    readonly name: string,
    readonly size: number,
    private readonly file: number,
  ) {}

  readInto(target: Uint8Array, offset: number): void {
    failingAsUnreadable(this.name, () => {
      for (let done = 0; done < target.length; ) {
        const n = fs.readSync(this.file, target, done, target.length - done, offset + done);
        if (n === 0) throw endsEarly(this.name, offset + done, offset + target.length);
        done += n;
      }
    });
  }

  close(): void {
    fs.closeSync(this.file);
  }
}

function fromBytes(input: Uint8Array, name: string): Source {
  const bytes = isGzip(input) ? unpack(input, name) : input;
  return {
    name,
    size: bytes.length,
    readInto(target, offset) {
      if (offset + target.length > bytes.length) throw endsEarly(name, bytes.length, offset + target.length);
      target.set(bytes.subarray(offset, offset + target.length));
    },
    close() {},
  };
}

function isGzip(bytes: Uint8Array): boolean {
  return bytes[0] === 0x1f && bytes[1] === 0x8b;
}

function unpack(bytes: Uint8Array, name: string): Uint8Array {
  try {
    return gunzipSync(bytes);
  } catch (error) {
    const { code, message } = error as NodeJS.ErrnoException;
    const cut = code === "Z_BUF_ERROR";
    const finding = cut ? "the gzip file ends early" : `the gzip file does not unpack (${message})`;
    throw new FitsError(cut ? "truncated" : "unreadable", finding, "fetch it again", { file: name });
  }
}

async function readStandardInput(): Promise<Uint8Array> {
  if (process.stdin.isTTY) {
    throw new FitsError("unreadable", "nothing is piped in", "pipe a FITS file in, or name one", {
      file: "standard input",
    });
  }
  const pieces: Buffer[] = [];
  for await (const piece of process.stdin) pieces.push(piece as Buffer);
  return Buffer.concat(pieces);
}

function endsEarly(name: string, has: number, needs: number): FitsError {
  const place = { file: name, byteOffset: has };
  return new FitsError("truncated", `the file has ${has} bytes where ${needs} are needed`, "fetch it again", place);
}

const REASONS: Record<string, [finding: string, remedy: string]> = {
  ENOENT: ["there is no such file", "check the name"],
  ENOTDIR: ["there is no such file", "check the name"],
  EACCES: ["this file may not be read", "change its permissions"],
  ERR_FS_FILE_TOO_LARGE: ["over 2 GiB through a pipe or gzip", "give it as a plain file"],
};

function failingAsUnreadable<T>(name: string, work: () => T): T {
  try {
    return work();
  } catch (error) {
    if (error instanceof FitsError) throw error;
    const { code, message } = error as NodeJS.ErrnoException;
    const [finding, remedy] = REASONS[code ?? ""] ?? [`reading failed (${code ?? message})`, "check the disk"];
    throw new FitsError("unreadable", finding, remedy, { file: name });
  }
}
