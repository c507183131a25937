import { describe, expect, test } from "vitest";
import { encodeFits } from "../../src/fits/encode.js";
import { passGate } from "../../src/fits/gate.js";
import { listHdus } from "../../src/fits/open.js";
import { scanFits } from "../../src/fits/scan.js";
import { openSource } from "../../src/fits/source.js";

const bytes = encodeFits([
  { kind: "primary", header: [] },
  { kind: "image", name: "FLUX", nx: 30, ny: 50, data: new Float32Array(1500) },
  { kind: "table", name: "T", columns: [{ name: "A", format: "2I", data: [1, -2, 300, -400, 5, 6] }] },
]);
const scanned = async () => {
  const source = await openSource(bytes, "x.fits");
  return { source, hdus: scanFits(source).hdus };
};

describe("the gate around fitsjs", () => {
  test("data ranges as the file's blocks have them, and accessors of native columns", async () => {
    const { source, hdus } = await scanned();
    const data = await passGate(source, hdus);
    // Headers take a block each; 6000 bytes of pixels take three.
    expect(data.map((one) => one && [one.offset, one.nBytes])).toEqual([null, [5760, 6000], [17280, 12]]);
    const view = new DataView(bytes.buffer, bytes.byteOffset + 17280, 12);
    expect(data[2]!.accessors!.map((read) => read(view, 4))).toEqual([[[300, -400], 8]]);
  });

  test("a scan that is wrong about sizes is contradicted, without a hang", async () => {
    for (const dataBytes of [3000, 5900]) {
      const { source, hdus } = await scanned();
      const wrong = hdus.map((hdu) => (hdu.index === 1 ? { ...hdu, dataBytes } : hdu));
      await expect(passGate(source, wrong)).rejects.toThrow(
        /^x\.fits: (the reader gave up \(it ran past the end\); check the file|HDU 1: two readings of the file disagree on where the data are; check the file with a FITS verifier)\.$/,
      );
    }
  });

  test("no global is touched", async () => {
    const before = Object.getOwnPropertyNames(globalThis).sort();
    const { source, hdus } = await scanned();
    await passGate(source, hdus);
    expect(Object.getOwnPropertyNames(globalThis).sort()).toEqual(before);
    expect("webkitSlice" in Blob.prototype).toBe(false);
  });
});

describe("a file's contents", () => {
  test("are listed without reading data", async () => {
    const { hdus, warnings } = await listHdus(bytes);
    expect(hdus.map(({ index, type, name, bitpix, axes }) => [index, type, name, bitpix, ...axes])).toEqual([
      [0, "PRIMARY", "PRIMARY", 8],
      [1, "IMAGE", "FLUX", -32, 30, 50],
      [2, "BINTABLE", "T", 8, 4, 3],
    ]);
    expect(warnings).toEqual([]);
  });
});
