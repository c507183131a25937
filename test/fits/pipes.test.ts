import { spawnSync } from "node:child_process";
import fs from "node:fs";
import { join } from "node:path";
import { gzipSync } from "node:zlib";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { encodeFits } from "../../src/fits/encode.js";
import { compileForChildren } from "../compiled.js";

let folder = "";
beforeAll(() => {
  folder = compileForChildren();
  fs.writeFileSync(join(folder, "child.js"), CHILD);
});
afterAll(() => fs.rmSync(folder, { recursive: true }));

/** Reads an image, doubles it, writes it; what goes wrong is said on standard error in one line. */
const CHILD = `
import { readImage } from "./fits/image.js";
import { writeFits } from "./fits/write.js";
try {
  const { nx, ny, data } = await readImage(process.argv[2]);
  await writeFits(process.argv[3], [{ kind: "primary", header: [], image: { nx, ny, data: data.map((v) => 2 * v) } }]);
} catch (error) {
  process.stderr.write(error.name + " " + error.message + "\\n");
  process.exitCode = 1;
}
`;

const frame = (values: number[]) =>
  encodeFits([
    { kind: "primary", header: [], image: { nx: values.length / 2, ny: 2, data: Float32Array.from(values) } },
  ]);
const run = (command: string, input: Uint8Array) =>
  spawnSync("bash", ["-c", command, process.execPath, join(folder, "child.js")], { input, maxBuffer: 1 << 28 });

describe("through pipes", () => {
  test("standard input to standard output, packed or not, gives the bytes a file would get", () => {
    for (const input of [frame([1, 2, 3, 4, 5, 6]), gzipSync(frame([1, 2, 3, 4, 5, 6]))]) {
      const { stdout, stderr } = run('"$0" "$1" - -', input);
      expect(stderr.toString()).toBe("");
      expect(Buffer.compare(stdout, frame([2, 4, 6, 8, 10, 12]))).toBe(0);
    }
  });

  test("a named pipe is read, a device is written", () => {
    const { stdout, stderr } = run('"$0" "$1" <(cat) /dev/stdout | cat', frame([1, 2, 3, 4]));
    expect(stderr.toString()).toBe("");
    expect(Buffer.compare(stdout, frame([2, 4, 6, 8]))).toBe(0);
  });

  test("nothing on standard input, and a reader that goes away: one line each", () => {
    const empty = run('"$0" "$1" - -', new Uint8Array(0));
    expect(empty.stderr.toString()).toBe(
      "FitsError standard input: 0 bytes where a FITS file has at least 2880; fetch it again.\n",
    );
    const large = frame(Array.from({ length: 400000 }, (_, i) => i));
    const gone = run('"$0" "$1" - - | head -c 100 > /dev/null', large);
    expect(gone.stderr.toString()).toBe(
      "FitsError standard output: nobody reads the pipe any more; keep its reader running.\n",
    );
  });
});
