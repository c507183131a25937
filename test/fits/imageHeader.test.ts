/** Headers without pixels: the same as the reader of the whole file finds, from files of which no more is there. */
import { readFileSync, rmSync, writeFileSync } from "node:fs";
import { join } from "node:path";
import { gzipSync } from "node:zlib";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import type { OutputHdu } from "../../src/fits/encode.js";
import { readImage } from "../../src/fits/image.js";
import { imageHeader } from "../../src/fits/imageHeader.js";
import { writeFits } from "../../src/fits/write.js";
import { freshFolder } from "../night/frames.js";

let folder: string;
const at = (name: string) => join(folder, name);
const card = (keyword: string, value: string) => ({ keyword, value, comment: "" });
const image = (name: string, nx: number): OutputHdu => ({
  ...{ kind: "image", name, nx, ny: 5, data: new Int32Array(5 * nx) },
  cards: [card("OBJECT", `of ${name}`)],
});
const TABLE: OutputHdu = {
  kind: "table",
  name: "T",
  columns: [{ name: "A", format: "1J", data: Int32Array.of(1, 2) }],
};

beforeAll(async () => {
  folder = freshFolder();
  const primary: OutputHdu = { kind: "primary", header: [card("IMAGETYP", "arc")] };
  await writeFits(at("later.fits"), [primary, TABLE, image("A", 700), image("B", 9)]);
  writeFileSync(at("later.fits.gz"), gzipSync(readFileSync(at("later.fits"))));
});
afterAll(() => rmSync(folder, { recursive: true }));

describe.each(["later.fits", "later.fits.gz"])("%s", (name) => {
  test.each([undefined, 2, 3])("image %s is that of the reader", async (hdu) => {
    const { nx, ny, bitpix, header, primaryHeader } = await readImage(at(name), { hdu });
    const seen = await imageHeader(at(name), hdu);
    expect([seen.nx, seen.ny, seen.bitpix]).toEqual([nx, ny, bitpix]);
    expect(seen.header.cards).toEqual(header.cards);
    expect(seen.primaryHeader.cards).toEqual(primaryHeader.cards);
  });

  test("an HDU that is no image, or not there, is refused as the reader does", async () => {
    for (const hdu of [1, 7]) {
      const said = async (work: Promise<unknown>) => work.then(String, (error: Error) => error.message);
      const refusal = await said(readImage(at(name), { hdu }));
      expect(await said(imageHeader(at(name), hdu))).toBe(refusal);
    }
  });
});

test("no pixel is read: packed files may end in them", async () => {
  const packed = readFileSync(at("later.fits.gz"));
  const noise = Int32Array.from({ length: 5 * 40_000 }, (_, i) => Math.imul(i, 2654435761));
  await writeFits(at("large.fits"), [{ kind: "primary", header: [], image: { nx: 40_000, ny: 5, data: noise } }]);
  const large = gzipSync(readFileSync(at("large.fits")));
  expect(large.length).toBeGreaterThan(4 * packed.length);
  writeFileSync(at("large.fits.gz"), large.subarray(0, large.length - 1000));
  expect((await imageHeader(at("large.fits.gz"))).nx).toBe(40_000);
});

test("what is no FITS file says so", async () => {
  writeFileSync(at("text.fits"), "text ".repeat(1000));
  writeFileSync(at("text.fits.gz"), gzipSync("text ".repeat(1000)));
  for (const name of ["text.fits", "text.fits.gz"]) {
    await expect(imageHeader(at(name))).rejects.toThrow(/starts with "text tex" where SIMPLE = T is expected/);
  }
  await expect(imageHeader(at("none.fits"))).rejects.toThrow(/there is no such file/);
});
