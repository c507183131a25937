/** Images as masks: the pixels that are not 0, against the array that was written. */
import { describe, expect, test } from "vitest";
import { encodeFits, type PixelArray } from "../../src/fits/encode.js";
import { readImage } from "../../src/fits/image.js";
import { readMask } from "../../src/fits/mask.js";

/** Larger than a piece of reading, and no whole number of words. */
const [NX, NY] = [703, 401];
/** Uneven, among them the first pixel, the last one, and neighbours on either side of a piece's end. */
const BAD = [0, 1, 702, 4711, 262142, 262143, 262144, 281901, NX * NY - 1];

function file(data: PixelArray): Uint8Array {
  return encodeFits([{ kind: "primary", header: [], image: { nx: NX, ny: NY, data } }]);
}

function marked<T extends PixelArray>(data: T, ...values: number[]): T {
  BAD.forEach((at, i) => {
    data[at] = values[i % values.length];
  });
  return data;
}

describe("a mask", () => {
  test.each([
    ["bytes, read piece by piece", marked(new Uint8Array(NX * NY), 1, 255, 7)],
    ["whole numbers", marked(new Int16Array(NX * NY), 1, -3)],
    ["numbers, some of them none", marked(new Float32Array(NX * NY), 0.5, Number.NaN, -1e-30)],
  ])("of %s", async (_, data) => {
    const bytes = file(data);
    const { pixels, nx, ny, checksum, warnings } = await readMask(bytes, { name: "bad.fits" });
    expect(pixels).toEqual(BAD);
    expect([nx, ny]).toEqual([NX, NY]);
    // The digest that stands in a product's HISTORY is that of the image.
    expect(checksum).toBe((await readImage(bytes)).checksum);
    expect(warnings).toEqual([]);
  });

  test.each([0, 262144, NX * NY - 1])("tells that byte %i of its data was changed", async (at) => {
    const bytes = file(marked(new Uint8Array(NX * NY), 1));
    bytes[bytes.length - Math.ceil((NX * NY) / 2880) * 2880 + at] ^= 2;
    const { warnings } = await readMask(bytes, { name: "bad.fits" });
    expect(warnings).toEqual(["bad.fits: HDU 0: the checksum is wrong; the file has been changed or damaged."]);
  });
});
