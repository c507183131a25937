/** Damaged files, some 700 of them, seeded: each gives a refusal of one sentence or the right numbers, none hangs and none ends
 * in another kind of error. They are read in a process of their own, which is ended when one file keeps it busy too long. */
import { spawn, spawnSync } from "node:child_process";
import fs from "node:fs";
import { join } from "node:path";
import { gzipSync } from "node:zlib";
import fc from "fast-check";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { encodeFits } from "../../src/fits/encode.js";
import { compileForChildren } from "../compiled.js";
import { judgeMissing } from "../judges.js";

const DEADLINE_MS = 20_000;
let folder = "";

beforeAll(() => {
  folder = compileForChildren();
  fs.writeFileSync(join(folder, "child.js"), CHILD);
});
afterAll(() => fs.rmSync(folder, { recursive: true }));

const CHILD = `
import { createHash } from "node:crypto";
import fs from "node:fs";
import { readImage } from "./fits/image.js";
import { readTable } from "./fits/table.js";
const digest = (value) => createHash("sha256").update(value).digest("hex");
for (const { path, table } of JSON.parse(fs.readFileSync(process.argv[2], "utf8"))) {
  const outcome = { path };
  try {
    const read = table ? await readTable(path, "TABLE") : await readImage(path);
    outcome.warnings = read.warnings;
    outcome.digest = table
      ? digest(JSON.stringify(read.columns.map(({ name, data }) => [name, [...data]])))
      : digest(read.nx + "x" + read.ny + ":" + Float64Array.from(read.data).join());
  } catch (error) {
    outcome.error = { name: error.name, message: error.message };
  }
  process.stdout.write(JSON.stringify(outcome) + "\\n");
}
`;

interface Task {
  path: string;
  table: boolean;
}

interface Outcome {
  path: string;
  digest?: string;
  warnings?: string[];
  error?: { name: string; message: string };
}

/** Outcomes up to the first file that hangs, which is then the last one. */
function readInChild(tasks: Task[]): Promise<Outcome[]> {
  const list = join(folder, "tasks.json");
  fs.writeFileSync(list, JSON.stringify(tasks));
  return new Promise((resolve, reject) => {
    const child = spawn(process.execPath, [join(folder, "child.js"), list], { stdio: ["ignore", "pipe", "inherit"] });
    const outcomes: Outcome[] = [];
    let pending = "";
    const hang = () => child.kill("SIGKILL");
    let timer = setTimeout(hang, DEADLINE_MS);
    child.stdout.on("data", (text) => {
      clearTimeout(timer);
      timer = setTimeout(hang, DEADLINE_MS);
      const lines = (pending + text).split("\n");
      pending = lines.pop()!;
      outcomes.push(...lines.map((line) => JSON.parse(line) as Outcome));
    });
    child.on("error", reject);
    child.on("close", () => {
      clearTimeout(timer);
      resolve(outcomes);
    });
  });
}

/** Every file is read; a change that leaves no trace in the outcome must be caught by the checksums. */
async function expectSurvived(sound: Uint8Array, mutants: Uint8Array[], table: boolean): Promise<void> {
  const files = [sound, ...mutants].map((bytes, i) => {
    const path = join(folder, `m${i}.fits`);
    fs.writeFileSync(path, bytes);
    return path;
  });
  const outcomes = await readInChild(files.map((path) => ({ path, table })));
  expect(outcomes.length, `files read; the next one hangs or crashes`).toBe(files.length);
  const [whole, ...rest] = outcomes;
  expect(whole.error).toBeUndefined();
  let nRefused = 0;
  for (const outcome of rest) {
    if (outcome.error) {
      nRefused++;
      expect(outcome.error.name, outcome.error.message).toBe("FitsError");
      expect(outcome.error.message.startsWith(`${outcome.path}: `), outcome.error.message).toBe(true);
      expect(outcome.error.message).toMatch(/^[^\n]{10,400}; [^\n]+[^.]\.$/);
    } else {
      const isSaid = outcome.warnings!.some((warning) => warning.includes("the checksum is wrong"));
      expect(isSaid || outcome.digest === whole.digest, `${outcome.path} is read differently in silence`).toBe(true);
    }
  }
  expect(nRefused).toBeGreaterThan(mutants.length / 10);
}

const uneven = (n: number, step: number) => Array.from({ length: n }, (_, i) => 3 + i * step + (i % 5));

function frame(): Uint8Array {
  return encodeFits([
    {
      kind: "primary",
      header: [{ keyword: "GAIN", value: 1.25, comment: "" }],
      image: { nx: 23, ny: 17, data: Uint16Array.from(uneven(23 * 17, 160)) },
    },
  ]);
}

function product(): Uint8Array {
  return encodeFits([
    { kind: "primary", header: [{ keyword: "OBJECT", value: "lamp", comment: "" }] },
    { kind: "image", name: "FLUX", nx: 23, ny: 17, data: Float32Array.from(uneven(23 * 17, 0.7)) },
    {
      kind: "table",
      name: "TABLE",
      columns: [
        { name: "FIBRE", format: "J", data: uneven(40, 3) },
        { name: "STATE", format: "5A", data: uneven(40, 2).map((v) => `s${v}`) },
        { name: "COEF", format: "3D", data: uneven(120, 0.1) },
      ],
    },
  ]);
}

/** Seeded damage: cut, flip, blot out, leave out, put in, double, edit a card. */
function mutantsOf(sound: Uint8Array, n: number, seed: number, nCards = 13): Uint8Array[] {
  const bytes = Buffer.from(sound);
  const byte = fc.integer({ min: 0, max: 255 });
  const at = fc.nat(bytes.length - 1);
  const inHeader = fc.nat(Math.min(bytes.length, 80 * nCards) - 1);
  const block = fc.nat(Math.floor(bytes.length / 2880) - 1);
  const digit = fc.constantFrom(..."0123456789-.'E /");
  const replaced = (from: number, to: number, piece: Uint8Array) =>
    Buffer.concat([bytes.subarray(0, from), piece, bytes.subarray(to)]);
  const kinds = fc.oneof(
    at.map((end) => bytes.subarray(0, end)),
    fc.tuple(at, byte).map(([i, b]) => replaced(i, i + 1, Buffer.of(b))),
    fc.tuple(inHeader, byte).map(([i, b]) => replaced(i, i + 1, Buffer.of(b))),
    fc
      .tuple(fc.nat(10), fc.integer({ min: 10, max: 29 }), digit)
      .map(([card, i, d]) => replaced(80 * card + i, 80 * card + i + 1, Buffer.from(d))),
    fc.tuple(fc.nat(nCards + 5), fc.nat(nCards + 5)).map(([a, b]) => {
      const swapped = Buffer.from(bytes);
      swapped.set(bytes.subarray(80 * a, 80 * a + 80), 80 * b);
      swapped.set(bytes.subarray(80 * b, 80 * b + 80), 80 * a);
      return swapped;
    }),
    fc.nat(nCards - 1).map((card) => replaced(80 * card, 80 * card + 80, Buffer.alloc(80, " "))),
    fc.nat(nCards - 1).map((card) => Buffer.concat([bytes.subarray(0, 80 * card), bytes.subarray(80 * card + 80)])),
    fc
      .tuple(
        fc.nat(nCards - 1),
        fc.constantFrom("99999999999", "9007199254740991", "-1", "1E300", "'text'", "T", "", "4294967296"),
      )
      .map(([card, v]) => replaced(80 * card + 10, 80 * card + 80, Buffer.from(v.padStart(20).padEnd(70)))),
    fc.tuple(block, byte).map(([k, b]) => replaced(2880 * k, 2880 * (k + 1), Buffer.alloc(2880, b))),
    block.map((k) => replaced(2880 * k, 2880 * (k + 1), Buffer.alloc(0))),
    block.map((k) => replaced(2880 * k, 2880 * k, bytes.subarray(2880 * k, 2880 * (k + 1)))),
    fc.uint8Array({ minLength: 1, maxLength: 9000 }).map((junk) => Buffer.concat([bytes, junk])),
    fc.nat(9000).map((length) => Buffer.concat([bytes, Buffer.alloc(length)])),
    fc.tuple(at, fc.nat(3000)).map(([i, length]) => replaced(i, i + length, Buffer.alloc(length))),
  );
  return fc.sample(kinds, { numRuns: n, seed });
}

describe("damaged files", () => {
  test("a frame", async () => {
    await expectSurvived(frame(), mutantsOf(frame(), 240, 1), false);
  });

  test("an image behind an empty primary", async () => {
    await expectSurvived(product(), mutantsOf(product(), 120, 2), false);
  });

  test("a table", async () => {
    await expectSurvived(product(), mutantsOf(product(), 120, 3), true);
  });

  test("a gzip file", async () => {
    const packed = gzipSync(frame());
    const mutants = fc.sample(
      fc.tuple(fc.nat(packed.length - 1), fc.integer({ min: 0, max: 255 }), fc.boolean()).map(([i, b, cut]) => {
        const copy = Buffer.from(packed);
        copy[i] = b;
        return cut ? copy.subarray(0, i) : copy;
      }),
      { numRuns: 60, seed: 4 },
    );
    await expectSurvived(packed, mutants, false);
  });

  test.skipIf(judgeMissing("fpack"))("Rice tiles", async () => {
    const path = join(folder, "rice.fits");
    fs.writeFileSync(path, frame());
    expect(spawnSync("fpack", ["-r", path]).status).toBe(0);
    const packed = fs.readFileSync(`${path}.fz`);
    // The tiles are in HDU 1: damage there.
    const head = packed.subarray(0, 2880);
    const mutants = mutantsOf(packed.subarray(2880), 160, 5, 30).map((rest) => Buffer.concat([head, rest]));
    await expectSurvived(packed, mutants, false);
  });
});
