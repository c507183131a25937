// Stored pixels to numbers, unsigned 16 bits: the kernel in a memory that is kept, its copy in included; the same into a
// fresh memory for every frame; into arrays that are kept, a loop over bytes put together by hand; the
// same through DataView; the readable reference at the smallest size. Beside it readImage, from the disk's cache: scan, gate,
// checksum and pixels.
import { mkdtempSync, rmSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { encodeFits } from "../dist/fits/encode.js";
import { readImage } from "../dist/fits/image.js";
import { decodePixels, decodingBytes } from "../dist/kernels/pixels.js";
import { decodePixels as decodeByReference } from "../dist/reference/pixels.js";
import { kernels } from "./kernel.mjs";
import { duration, figures, times } from "./table.mjs";
import { ratio, timeInTurns, timing } from "./timing.mjs";

export const title = "unsigned 16-bit pixels to Float32, and reading a frame";

const scaling = { bitpix: 16, scale: 1, zero: 32768 };
const headerBytes = 2880;

/** @param {{ small?: boolean }} flags */
export async function run({ small }) {
  const folder = mkdtempSync(join(tmpdir(), "hatchel-bench-pixels-"));
  try {
    const cases = [];
    for (const [nx, ny] of [
      [512, 608],
      [2048, 2112],
      [4096, 4112],
    ].slice(0, small ? 2 : 3))
      cases.push(await measure(nx, ny, folder));
    return {
      head: [
        "pixels",
        "kernel",
        "kernel, fresh memory",
        "JS loop",
        "DataView",
        "reference",
        "readImage",
        "loop ÷ kernel",
        "kernel, GB/s stored",
      ],
      rows: cases.map(({ nx, ny, timings: t, read }) => [
        `${nx} × ${ny}`,
        ...["kernel", "door", "loop", "view", "reference"].map((name) => (t[name] ? duration(t[name].median) : "–")),
        duration(read.median),
        times(ratio(t.loop, t.kernel)),
        figures((2 * nx * ny) / t.kernel.median / 1e6),
      ]),
      cases,
    };
  } finally {
    rmSync(folder, { recursive: true });
  }
}

async function measure(nx, ny, folder) {
  const { bytes, counts } = storedImage(nx, ny);
  const timings = timeInTurns(pixelRivals(nx, ny), { rounds: 5 });
  return { nx, ny, timings, read: await timeReading(join(folder, `${nx}.fits`), bytes, counts) };
}

/** Who decodes an image, once all give the counts that were stored. @param {number} nx @param {number} ny */
export function pixelRivals(nx, ny) {
  const n = nx * ny;
  const { bytes, counts } = storedImage(nx, ny);
  const stored = bytes.subarray(headerBytes, headerBytes + 2 * n);
  const values = new Float32Array(n);
  const decoders = {
    kernel: openKernel(stored, n),
    door: () => decodePixels(kernels.workbench(decodingBytes(n, scaling)), n, scaling, (room) => room.set(stored)),
    loop: () => byHand(stored, n, values),
    view: () => byView(stored, n, values),
    ...(n < 1e6 ? { reference: () => decodeByReference(stored, n, scaling) } : {}),
  };
  for (const [name, decode] of Object.entries(decoders)) {
    const decoded = decode();
    for (let i = 0; i < n; i++) if (decoded[i] !== counts[i]) throw new Error(`pixels: ${name} differs in pixel ${i}.`);
  }
  const tasks = Object.entries(decoders).map(([name, decode]) => [name, () => decode()[n - 1]]);
  return /** @type {Record<keyof typeof decoders, () => number>} */ (Object.fromEntries(tasks));
}

function storedImage(nx, ny) {
  const counts = Uint16Array.from({ length: nx * ny }, (_, i) => (i * 40503) & 0xffff);
  return { counts, bytes: encodeFits([{ kind: "primary", header: [], image: { nx, ny, data: counts } }]) };
}

async function timeReading(path, bytes, counts) {
  writeFileSync(path, bytes);
  const taken = [];
  for (let round = 0; round < 5; round++) {
    const began = performance.now();
    const { data } = await readImage(path);
    taken.push(performance.now() - began);
    if (data[7] !== counts[7] || data.length !== counts.length) throw new Error("pixels: readImage differs.");
  }
  return timing(taken);
}

function openKernel(stored, n) {
  const bench = kernels.workbench(4 * n);
  const values = bench.float32(n);
  const room = new Uint8Array(values.buffer, values.byteOffset + 2 * n, 2 * n);
  return () => {
    room.set(stored);
    bench.call.pixelsToFloat32(16, room.byteOffset, values.byteOffset, n, scaling.zero, 0, 0n);
    return values;
  };
}

function byHand(stored, n, values) {
  for (let i = 0, at = 0; i < n; i++, at += 2) values[i] = ((stored[at] ^ 0x80) << 8) | stored[at + 1];
  return values;
}

function byView(stored, n, values) {
  const view = new DataView(stored.buffer, stored.byteOffset, stored.byteLength);
  for (let i = 0; i < n; i++) values[i] = view.getInt16(2 * i) + 32768;
  return values;
}
