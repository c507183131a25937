/** Threads over one shared memory: the same bits however many there are. The numbers of one thread are the judge; whether those
 * are right is asked elsewhere. */
import { spawnSync } from "node:child_process";
import { fileURLToPath } from "node:url";
import { afterAll, describe, expect, it } from "vitest";
import { growRejected } from "../src/extraction/growth.js";
import type { Precision } from "../src/kernels/banded.js";
import { ExtractionBench } from "../src/kernels/extraction.js";
import { type Kernels, loadKernels, useThreads } from "../src/kernels/module.js";
import type { ExtractionInput, Method } from "../src/reference/extract.js";
import { makeScene, seeded } from "./scene.js";

async function withThreads(nThread: number): Promise<Kernels> {
  useThreads(nThread);
  return loadKernels();
}

const teams = [await withThreads(1), await withThreads(2), await withThreads(3)];
afterAll(() => useThreads(1));

/** Hits on some pixels, rejected and grown; six blocks, the last of them narrow. */
function roughInput(method: Method): ExtractionInput {
  const { input } = makeScene({ nx: 83 });
  const next = seeded(3);
  for (let i = 0; i < 40; i++) {
    const at = Math.floor(next() * input.ny) * input.nx + Math.floor(next() * (input.nx - 1));
    input.electrons[at] += 900;
    input.electrons[at + 1] += 60;
  }
  return { ...input, method, crosstalk: method !== "joint", kappa: 5, growKappa: 2.5 };
}

function openBench(kernels: Kernels, input: ExtractionInput, precision: Precision): ExtractionBench {
  const rows = Int32Array.from({ length: input.nFibre }, (_, k) => k);
  return new ExtractionBench(kernels, input, rows, input.nFibre, precision);
}

/** All that an extraction leaves, byte for byte. */
function bytesOf(bench: ExtractionBench): Buffer {
  const images = [...Object.values(bench.output), bench.rejected, bench.fitFlux] as Uint8Array[];
  return Buffer.concat(images.map(({ buffer, byteOffset, byteLength }) => Buffer.from(buffer, byteOffset, byteLength)));
}

function extracted(bench: ExtractionBench, { nx, ny }: ExtractionInput): Buffer {
  bench.run();
  expect(growRejected(bench.rejected, nx, ny).includes(1)).toBe(true);
  bench.settleGrown();
  return bytesOf(bench);
}

describe("a team of threads", () => {
  it("has as many as were asked for", () => {
    expect(teams.map(({ nThread }) => nThread)).toEqual([1, 2, 3]);
  });

  it.each(["joint", "optimal", "boxcar"] as const)("extracts the same bits as one thread: %s", (method) => {
    const input = roughInput(method);
    for (const precision of ["f32", "f64"] as const) {
      const [alone, ...shared] = teams.map((kernels) => extracted(openBench(kernels, input, precision), input));
      for (const bytes of shared) expect(bytes.equals(alone), precision).toBe(true);
    }
  });

  it("touches pages ahead without a change to them, and comes to work afterwards", async () => {
    for (const kernels of teams) {
      const bench = kernels.workbench(2 ** 22);
      const bytes = bench.uint8(2 ** 21 + 7);
      const expected = Uint8Array.from(bytes, (_, i) => (i * 7919) >> 3);
      bytes.set(expected);
      for (let turn = 0; turn < 20; turn++) bench.touchAhead(bytes.byteOffset, bytes.length);
      // Those who write meanwhile are not disturbed.
      for (let turn = 1; turn <= 20; turn++) for (let i = 0; i < bytes.length; i += 4096) bytes[i] = expected[i] ^ turn;
      await new Promise((done) => setTimeout(done, 200));
      for (let i = 0; i < bytes.length; i += 4096) expected[i] ^= 20;
      expect(Buffer.compare(bytes, expected)).toBe(0);
    }
    const input = roughInput("joint");
    const [alone, ...shared] = teams.map((kernels) => extracted(openBench(kernels, input, "f32"), input));
    for (const bytes of shared) expect(bytes.equals(alone)).toBe(true);
  });

  it("may have more threads than there are tiles", () => {
    const { input } = makeScene({ nx: 20 });
    const [alone, , three] = teams.map((kernels) => {
      const bench = openBench(kernels, input, "f64");
      bench.run();
      return bytesOf(bench);
    });
    expect(three.equals(alone)).toBe(true);
  });

  it("serves two workbenches in turns", () => {
    const inputs = [roughInput("joint"), makeScene({ seed: 4 }).input];
    const [alone, , three] = teams.map((kernels) => {
      const benches = inputs.map((input) => openBench(kernels, input, "f32"));
      for (let turn = 0; turn < 12; turn++) benches[turn % 2].run();
      return Buffer.concat(benches.map(bytesOf));
    });
    expect(three.equals(alone)).toBe(true);
  });

  it("runs the tiles that were asked for, and no others", () => {
    // Columns that were not asked for stay untouched: 0 in a fresh memory.
    const input = roughInput("joint");
    const bench = openBench(teams[2], input, "f64");
    bench.run(32, 64);
    const done = Array.from(bench.output.flux.subarray(0, input.nx), (flux) => flux !== 0);
    expect(done).toEqual(Array.from({ length: input.nx }, (_, x) => x >= 32 && x < 64));
  });

  it("tells of a kernel that stops, and does the next job", () => {
    const input = roughInput("joint");
    const broken = teams[2].workbench(4096);
    // A job whose pointers lie outside the memory.
    const jobs = [0, 1, 2].map(() => broken.int32(256).fill(-64).byteOffset);
    expect(() => broken.share("extractTile64", jobs, 40)).toThrow();
    const bytes = extracted(openBench(teams[2], input, "f64"), input);
    expect(bytes.equals(extracted(openBench(teams[0], input, "f64"), input))).toBe(true);
  });

  it("tells of a kernel that stops in a thread of its own", async () => {
    const bench = teams[2].workbench(4096);
    // The caller's job has no fibres and no columns: nothing to do.
    const jobs = [0, -64, -64].map((pointer) => bench.int32(256).fill(pointer).byteOffset);
    const share = () => bench.share("settleTile64", jobs, 100_000);
    let told = "";
    // Threads come when they have started: a few turns at the most.
    for (let turn = 0; turn < 200 && told === ""; turn++) {
      try {
        share();
      } catch (error) {
        told = (error as Error).message;
      }
      await new Promise((resolve) => setTimeout(resolve, 5));
    }
    expect(told).toBe("A kernel stopped in another thread; this is a defect of the program.");
  });

  it.each([0, 17, 1.5])("of %s is refused", (nThread) => {
    expect(() => useThreads(nThread)).toThrow(`${nThread} threads; 1 to 16 are possible.`);
  });

  it("keeps no process alive while it is idle", () => {
    const module = new URL("../dist/kernels/module.js", import.meta.url).href;
    const script = `import { loadKernels, useThreads } from ${JSON.stringify(module)};
      useThreads(3);
      const kernels = await loadKernels();
      const bench = kernels.workbench(4096);
      const jobs = [0, 1, 2].map(() => bench.int32(256).byteOffset);
      console.log(kernels.nThread);
      for (let turn = 0; turn < 100; turn++) bench.share("settleTile32", jobs, 1000);`;
    const cwd = fileURLToPath(new URL("..", import.meta.url));
    const run = spawnSync(process.execPath, ["--input-type=module", "-e", script], {
      cwd,
      encoding: "utf8",
      timeout: 20_000,
    });
    expect([run.signal, run.status, run.stdout, run.stderr]).toEqual([null, 0, "3\n", ""]);
  });
});
