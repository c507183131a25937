import fs from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { encodeFits, type OutputColumn } from "../../src/fits/encode.js";
import { readTable } from "../../src/fits/table.js";
import { judgeMissing, python } from "../judges.js";

let folder = "";
beforeAll(() => {
  folder = fs.mkdtempSync(join(tmpdir(), "hatchel-table-"));
});
afterAll(() => fs.rmSync(folder, { recursive: true }));

const table = (...columns: OutputColumn[]) =>
  encodeFits([
    { kind: "primary", header: [] },
    { kind: "table", name: "TRAMLINES", columns, cards: [{ keyword: "PIXORIG", value: 0, comment: "" }] },
  ]);

describe("what the writer wrote", () => {
  test("every kind of column comes back with its type, unit and repeat count", async () => {
    const bytes = table(
      { name: "FIBRE", format: "1J", data: Int32Array.of(1, -2, 300000) },
      { name: "STATE", format: "8A", data: ["lit", "", "dead"] },
      { name: "LEGENDRE", format: "2D", data: Float64Array.of(1.5, 2.5, Number.NaN, 4.5, 5.5, 6.5), unit: "pix" },
      { name: "GOOD", format: "2L", data: [true, false, false, true, true, true] },
      { name: "RMS", format: "E", data: Float32Array.of(0.1, 0.2, 0.3) },
      { name: "BLOCK", format: "I", data: [7, -1, 3], nullValue: -1 },
      { name: "LEVEL", format: "3B", data: [1, 2, 3, 4, 5, 6, 7, 8, 255] },
      { name: "SERIAL", format: "K", data: [4294967297n, -5n, 0n] },
    );
    const read = await readTable(bytes, "tramlines");
    expect([read.nRows, read.hduIndex, read.header.integer("PIXORIG"), read.warnings]).toEqual([3, 1, 0, []]);
    const summary = read.columns.map(({ name, unit, repeat, data }) => [
      name,
      unit,
      repeat,
      data.constructor.name,
      [...data],
    ]);
    expect(summary).toEqual([
      ["FIBRE", "", 1, "Int32Array", [1, -2, 300000]],
      ["STATE", "", 1, "Array", ["lit", "", "dead"]],
      ["LEGENDRE", "pix", 2, "Float64Array", [1.5, 2.5, Number.NaN, 4.5, 5.5, 6.5]],
      ["GOOD", "", 2, "Array", [true, false, false, true, true, true]],
      ["RMS", "", 1, "Float32Array", [0.1, 0.2, 0.3].map(Math.fround)],
      ["BLOCK", "", 1, "Float64Array", [7, Number.NaN, 3]],
      ["LEVEL", "", 3, "Uint8Array", [1, 2, 3, 4, 5, 6, 7, 8, 255]],
      ["SERIAL", "", 1, "Float64Array", [4294967297, -5, 0]],
    ]);
  });

  test("columns can be chosen, in one's own order", async () => {
    const bytes = table({ name: "A", format: "J", data: [1] }, { name: "B", format: "J", data: [2] });
    const { columns } = await readTable(bytes, 1, { columns: ["b", "A"] });
    expect(columns.map((column) => [column.name, ...column.data])).toEqual([
      ["B", 2],
      ["A", 1],
    ]);
  });

  test("an empty table has no rows", async () => {
    const { nRows, columns } = await readTable(table({ name: "A", format: "J", data: [] }), 1);
    expect([nRows, columns[0].data.length]).toEqual([0, 0]);
  });

  test("a changed byte is a warning", async () => {
    const bytes = Buffer.from(table({ name: "A", format: "J", data: [1, 2] }));
    bytes[2880 * 2 + 7] ^= 4;
    const { columns, warnings } = await readTable(bytes, 1, { name: "x.fits" });
    expect([...columns[0].data]).toEqual([1, 6]);
    expect(warnings).toEqual(["x.fits: HDU 1: the checksum is wrong; the file has been changed or damaged."]);
  });
});

describe("refusals", () => {
  const bytes = table({ name: "A", format: "J", data: [1, 2] }, { name: "B", format: "K", data: [2n ** 53n + 1n, 0n] });
  const edited = (from: string, to: string) => {
    const copy = Buffer.from(bytes);
    copy.write(to, copy.indexOf(from), "latin1");
    return copy;
  };
  test.each<[string, Uint8Array, number, string]>([
    ["another HDU", bytes, 0, "HDU 0: this is the primary HDU, not a binary table; choose another HDU."],
    [
      "a number that a double cannot count",
      bytes,
      1,
      "HDU 1: column B holds 9007199254740993, beyond what a double counts exactly; ask for the other columns by name.",
    ],
    [
      "complex numbers",
      edited("'K  ", "'C  "),
      1,
      "HDU 1: column B holds complex numbers (C), which are not read; ask for the other columns by name.",
    ],
    ["a format that is none", edited("'K  ", "'Y  "), 1, "HDU 1: TFORM2 is 'Y'; it must be a count and a letter."],
    [
      "rows of another length",
      edited("'K  ", "'I  "),
      1,
      "HDU 1: the columns fill 6 bytes of rows of 12; repair NAXIS1 or TFORMn.",
    ],
  ])("%s", async (_, file, hdu, sentence) => {
    await expect(readTable(file, hdu, { name: "x.fits" })).rejects.toThrow(`x.fits: ${sentence}`);
  });

  test("a column that is not there", async () => {
    await expect(readTable(bytes, 1, { columns: ["RMS"], name: "x.fits" })).rejects.toThrow(
      "x.fits: HDU 1: there is no column RMS; the table has A, B.",
    );
  });
});

const WRITE_TABLE = `
import sys, numpy as np
from astropy.io import fits
n = 4
hdu = fits.BinTableHDU.from_columns([
    fits.Column('U', 'I', array=np.array([0, 1, 40000, 65535], 'u2'), bzero=32768),
    fits.Column('V', 'J', array=np.array([0, 1, 2**31, 2**32 - 1], 'u4'), bzero=2**31),
    fits.Column('W', 'K', array=np.array([0, 1, 2**53, 2**63], 'u8'), bzero=2**63),
    fits.Column('S', '2I', array=np.array([[0, 2], [4, 6], [8, 10], [12, -14]], 'i2')),
    fits.Column('N', 'J', array=np.array([5, -99, 7, 8]), null=-99),
    fits.Column('M', 'B', array=np.array([0, 127, 128, 255], 'u1')),
    fits.Column('T', '3A', array=['abc', 'd', '', ' e']),
])
hdu.header['TSCAL4'] = 0.5
hdu.header['TZERO4'] = 1
hdu.header['TZERO6'] = -128
hdu.writeto(sys.argv[1], checksum=True)
`;

describe.skipIf(judgeMissing("astropy"))("tables written by astropy", () => {
  test("unsigned, scaled and null numbers, and texts", async () => {
    const path = join(folder, "a.fits");
    python(WRITE_TABLE, [path]);
    const { columns, warnings } = await readTable(path, 1);
    expect(warnings).toEqual([]);
    expect(Object.fromEntries(columns.map(({ name, data }) => [name, [...data]]))).toEqual({
      U: [0, 1, 40000, 65535],
      V: [0, 1, 2 ** 31, 2 ** 32 - 1],
      W: [0, 1, 2 ** 53, 2 ** 63],
      S: [1, 2, 3, 4, 5, 6, 7, -6],
      N: [5, Number.NaN, 7, 8],
      M: [-128, -1, 0, 127],
      T: ["abc", "d", "", " e"],
    });
  });
});
