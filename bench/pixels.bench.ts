/** Decoding stored pixels, and reading whole frames from the disk. The kernel and the two ways in JavaScript are checked against
 * each other before they are timed. */
import fs from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, bench, describe } from "vitest";
import { encodeFits } from "../src/fits/encode.js";
import { readImage } from "../src/fits/image.js";
import { loadKernels } from "../src/kernels/module.js";
import { decodePixels, decodingBytes } from "../src/kernels/pixels.js";
import { decodePixels as decodeByReference } from "../src/reference/pixels.js";

const kernels = await loadKernels();
const scaling = { bitpix: 16, scale: 1, zero: 32768 };
const folder = fs.mkdtempSync(join(tmpdir(), "hatchel-bench-"));
afterAll(() => fs.rmSync(folder, { recursive: true }));
let sink = 0;

for (const [nx, ny] of [
  [512, 512],
  [2148, 910],
  [4112, 4096],
]) {
  const n = nx * ny;
  const counts = Uint16Array.from({ length: n }, (_, i) => (i * 40503) & 0xffff);
  const bytes = encodeFits([{ kind: "primary", header: [], image: { nx, ny, data: counts } }]);
  const stored = bytes.subarray(2880, 2880 + 2 * n);
  const path = join(folder, `${nx}.fits`);
  fs.writeFileSync(path, bytes);
  const kernel = decodePixels(kernels.workbench(decodingBytes(n, scaling)), n, scaling, (room) => room.set(stored));
  const reference = decodeByReference(stored, n, scaling);
  if (kernel.some((value, i) => value !== reference[i])) throw new Error("kernel and reference disagree");

  describe(`${nx} × ${ny} unsigned 16-bit pixels`, () => {
    bench("kernel, copy in included", () => {
      sink += decodePixels(kernels.workbench(decodingBytes(n, scaling)), n, scaling, (room) => room.set(stored))[n - 1];
    });
    bench("DataView into Float32", () => {
      const view = new DataView(stored.buffer, stored.byteOffset, stored.byteLength);
      const values = new Float32Array(n);
      for (let i = 0; i < n; i++) values[i] = view.getInt16(2 * i) + 32768;
      sink += values[n - 1];
    });
    bench("readImage: scan, gate, checksum, pixels", async () => {
      sink += (await readImage(path)).data[n - 1];
    });
  });
}

process.on("exit", () => {
  if (Number.isNaN(sink)) process.exitCode = 1;
});
