/** Frames that come while the folder is watched: slowly, moved in, replaced, damaged, and of other kinds. */
import { appendFileSync, copyFileSync, readFileSync, renameSync, rmSync, writeFileSync } from "node:fs";
import { join } from "node:path";
import { gzipSync } from "node:zlib";
import { afterEach, beforeEach, expect, test } from "vitest";
import { watchFolder } from "../../src/night/watch.js";
import { freshFolder, writeFrame } from "./frames.js";

const EVERY = 20;
let folder: string;
let elsewhere: string;
let came: string[];
let told: string[];
let controller: AbortController;
let watching: Promise<void>;

beforeEach(async () => {
  folder = freshFolder();
  elsewhere = freshFolder();
  [came, told] = [[], []];
  controller = new AbortController();
  await writeFrame(join(elsewhere, "object.fits"), { IMAGETYP: "object", OBJECT: "m1" }, 4000);
  await writeFrame(join(elsewhere, "arc.fits"), { IMAGETYP: "arc" });
  await writeFrame(join(elsewhere, "what.fits"), { IMAGETYP: "thing" });
  copyFileSync(join(elsewhere, "object.fits"), join(folder, "known.fits"));
  watching = watchFolder(folder, {
    known: [join(folder, "known.fits")],
    everyMs: EVERY,
    signal: controller.signal,
    onObject: ({ name, object }) => came.push(`${name} ${object}`),
    onOther: (sentence) => told.push(sentence),
  });
});
afterEach(async () => {
  controller.abort();
  await watching;
  for (const one of [folder, elsewhere]) rmSync(one, { recursive: true });
});

const looks = (n: number) => new Promise((resolve) => setTimeout(resolve, n * EVERY));
async function until(condition: () => boolean): Promise<void> {
  for (let i = 0; i < 500 && !condition(); i++) await looks(1);
  expect(condition()).toBe(true);
}

test("a slow writer's frame is taken when its last byte is there, and not before", async () => {
  const bytes = readFileSync(join(elsewhere, "object.fits"));
  const path = join(folder, "slow.fits");
  const cuts = [0, 100, 2880, 5000, 50_000, bytes.length - 2881, bytes.length - 2880 - 40];
  writeFileSync(path, "");
  for (let i = 1; i < cuts.length; i++) {
    appendFileSync(path, bytes.subarray(cuts[i - 1], cuts[i]));
    // Longer than it takes to believe a file that stands still.
    await looks(6);
    expect(came, `${cuts[i]} of ${bytes.length} bytes`).toEqual([]);
  }
  appendFileSync(path, bytes.subarray(cuts[cuts.length - 1]));
  await until(() => came.length > 0);
  expect(came).toEqual(["slow.fits m1"]);
  expect(told).toEqual([]);
});

test("a frame that is moved there is taken once; one that was known is not", async () => {
  copyFileSync(join(elsewhere, "object.fits"), join(elsewhere, ".object.part"));
  renameSync(join(elsewhere, ".object.part"), join(folder, "moved.fits"));
  await until(() => came.length > 0);
  await looks(6);
  expect(came).toEqual(["moved.fits m1"]);
});

test("a packed frame is taken when all of it unpacks", async () => {
  const packed = gzipSync(readFileSync(join(elsewhere, "object.fits")));
  const path = join(folder, "packed.fits.gz");
  writeFileSync(path, packed.subarray(0, packed.length - 30));
  await looks(8);
  expect(came).toEqual([]);
  appendFileSync(path, packed.subarray(packed.length - 30));
  await until(() => came.length > 0);
  expect(came).toEqual(["packed.fits.gz m1"]);
});

test("a frame that is written anew is taken anew", async () => {
  const path = join(folder, "twice.fits");
  copyFileSync(join(elsewhere, "object.fits"), path);
  await until(() => came.length === 1);
  await writeFrame(join(elsewhere, "other.fits"), { IMAGETYP: "object", OBJECT: "m2" });
  renameSync(join(elsewhere, "other.fits"), path);
  await until(() => came.length === 2);
  expect(came).toEqual(["twice.fits m1", "twice.fits m2"]);
});

test("other frames, and files that are none, are told and left alone", async () => {
  copyFileSync(join(elsewhere, "arc.fits"), join(folder, "arc.fits"));
  copyFileSync(join(elsewhere, "what.fits"), join(folder, "what.fits"));
  writeFileSync(join(folder, "text.fits"), "no FITS file at all".repeat(300));
  writeFileSync(join(folder, "notes.txt"), "no frame");
  writeFileSync(join(folder, ".part.fits"), "hidden");
  await until(() => told.length === 3);
  await looks(4);
  expect(told.sort()).toEqual([
    expect.stringMatching(
      /text\.fits: HDU 0: starts with "no FITS " where SIMPLE = T is expected; give a FITS file\.$/,
    ),
    expect.stringMatching(/^arc\.fits: it is IMAGETYP 'arc', so it is left alone/),
    expect.stringMatching(/^what\.fits: neither IMAGETYP nor OBJECT says what it is, so it is left alone/),
  ]);
  expect(came).toEqual([]);
});
