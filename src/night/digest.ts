/** What a product hangs on, as SHA-256: bytes of files, options, and the program itself. */
import { createHash, webcrypto } from "node:crypto";
import { readdirSync, readFileSync } from "node:fs";
import { open } from "node:fs/promises";
import { join } from "node:path";
import { fileURLToPath } from "node:url";

/** Read in one piece up to here, so that the sum can be taken beside other work. */
const ONE_PIECE_BYTES = 1 << 28;

/** Of a file's bytes, in hexadecimal. */
export async function fileDigest(path: string): Promise<string> {
  const file = await open(path, "r");
  try {
    const { size } = await file.stat();
    if (size <= ONE_PIECE_BYTES) {
      const sum = await webcrypto.subtle.digest("SHA-256", await file.readFile());
      return Buffer.from(sum).toString("hex");
    }
    const hash = createHash("sha256");
    const piece = Buffer.allocUnsafe(1 << 22);
    for (;;) {
      const { bytesRead } = await file.read(piece, 0, piece.length, null);
      if (bytesRead === 0) return hash.digest("hex");
      hash.update(piece.subarray(0, bytesRead));
    }
  } finally {
    await file.close();
  }
}

/** Of plain data: keys in the order in which they stand. */
export function digestOf(value: unknown): string {
  return createHash("sha256").update(JSON.stringify(value)).digest("hex");
}

let ofProgram: string | undefined;

/** Of the program's own code, kernels included: another build may make other numbers, whatever its version says. */
export function programDigest(): string {
  // src/, or dist/ with the command's bundle in it: every place from which this module runs lies one folder below.
  ofProgram ??= codeDigest(fileURLToPath(new URL("..", import.meta.url)));
  return ofProgram;
}

/** Of every module below `folder`. */
export function codeDigest(folder: string): string {
  const hash = createHash("sha256");
  const names = (readdirSync(folder, { recursive: true }) as string[]).map((name) => name.replaceAll("\\", "/"));
  for (const name of names.filter((one) => /\.(js|ts|wasm)$/.test(one) && !one.endsWith(".d.ts")).sort()) {
    hash.update(`${name}\0`).update(readFileSync(join(folder, name)));
  }
  return hash.digest("hex");
}
