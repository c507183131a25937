import fs from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { historyCards } from "../../src/fits/carry.js";
import { checksum, encodeChecksum } from "../../src/fits/checksum.js";
import { encodeFits, type OutputHdu } from "../../src/fits/encode.js";
import type { Card } from "../../src/fits/header.js";
import { writeFits } from "../../src/fits/write.js";
import { fitsverify, judgeMissing, python } from "../judges.js";

let folder = "";
beforeAll(() => {
  folder = fs.mkdtempSync(join(tmpdir(), "hatchel-write-"));
});
afterAll(() => fs.rmSync(folder, { recursive: true }));

/** No two pixels alike, and no symmetry. */
function ramp(n: number, step: number, start: number): number[] {
  return Array.from({ length: n }, (_, i) => start + step * i + (i % 7) * 0.25);
}

function everyKind(more: Card[] = []): OutputHdu[] {
  const float32 = Float32Array.from(ramp(35, 1.7, -20));
  float32[3] = Number.NaN;
  return [
    {
      kind: "primary",
      header: [
        { keyword: "OBJECT", value: "o'clock / noon", comment: "doubled quote and slash" },
        { keyword: "EXPTIME", value: 1234.5678901234567, comment: "s" },
        { keyword: "ESO DET CHIP1 NAME", value: "left", comment: "words" },
        { keyword: "LONG", value: "it's ".repeat(40).trim(), comment: "goes on" },
        { keyword: "BIG", value: 12345678901234567890n, comment: "" },
        ...more,
        { keyword: "TINY", value: -1.2345678901234567e-100, comment: "" },
        { keyword: "PAIR", value: [1.5, -2], comment: "complex" },
        ...historyCards("0.0.1", ["method=joint"], [{ name: "/some/where/flat.fits", checksum: "12ab" }]),
      ],
      image: { nx: 5, ny: 7, data: Uint16Array.from(ramp(35, 1900, 3)), unit: "adu" },
    },
    { kind: "image", name: "FLUX", unit: "electron", nx: 5, ny: 7, data: float32 },
    { kind: "image", name: "WAVE", unit: "Angstrom", nx: 7, ny: 5, data: Float64Array.from(ramp(35, 0.1, 5000)) },
    { kind: "image", name: "FLAGS", nx: 5, ny: 7, data: Int32Array.from(ramp(35, 7e7, -2e9)) },
    { kind: "image", name: "COUNT", nx: 5, ny: 7, data: Uint32Array.from(ramp(35, 1.2e8, 3)) },
    { kind: "image", name: "MASK", nx: 5, ny: 7, data: Uint8Array.from(ramp(35, 7, 3)) },
    { kind: "image", name: "SIGNED", nx: 5, ny: 7, data: Int16Array.from(ramp(35, 1800, -32000)) },
    {
      kind: "table",
      name: "POSITIONS",
      columns: [
        { name: "FIBRE", format: "1J", data: Int32Array.of(1, 2, 3) },
        { name: "STATE", format: "8A", data: ["lit", "dim", "dead"] },
        { name: "COEF", format: "3D", data: Float64Array.from(ramp(9, 1.3, -4)), unit: "pix" },
        { name: "GOOD", format: "L", data: [true, false, true] },
        { name: "SHIFT", format: "E", data: Float32Array.of(0.5, Number.NaN, -3.25), unit: "pix" },
        { name: "BLOCK", format: "I", data: [7, -1, 3], nullValue: -1 },
        { name: "LEVEL", format: "2B", data: [1, 2, 3, 254, 255, 6] },
        { name: "SERIAL", format: "K", data: [9007199254740993n, -5n, 0n] },
      ],
    },
  ];
}

const READ_BACK = `
import sys, json, numpy as np
from astropy.io import fits
h = fits.open(sys.argv[1], checksum=True)
clean = lambda a: [None if x != x else (x.item() if hasattr(x, 'item') else x) for x in np.asarray(a).ravel()]
out = {x.name: clean(x.data) for x in h[:7]}
out['shape'] = h['FLUX'].data.shape
out['cards'] = [repr(h[0].header[k]) for k in ('OBJECT','EXPTIME','ESO DET CHIP1 NAME','LONG','BIG','NOTHING','TINY','PAIR')]
out['history'] = list(h[0].header['HISTORY'])
out['table'] = {n: clean(h['POSITIONS'].data[n]) for n in h['POSITIONS'].data.names}
print(json.dumps(out))
`;

describe.skipIf(judgeMissing("fitsverify"))("judged by fitsverify", () => {
  test("every kind of HDU passes without error or warning", async () => {
    const path = join(folder, "every.fits");
    await writeFits(path, everyKind());
    expect(fitsverify(path)).toEqual([]);
  });
});

describe.skipIf(judgeMissing("astropy"))("read by astropy", () => {
  test("the same numbers, texts and cards come back", async () => {
    const path = join(folder, "back.fits");
    const hdus = everyKind([{ keyword: "NOTHING", value: null, comment: "no value" }]);
    await writeFits(path, hdus);
    const back = JSON.parse(python(READ_BACK, [path]));
    const orNull = (data: ArrayLike<number>) => Array.from(data, (x) => (Number.isNaN(x) ? null : x));
    for (const hdu of hdus) {
      if (hdu.kind === "table") continue;
      const image = hdu.kind === "image" ? hdu : hdu.image!;
      expect(back[hdu.name ?? "PRIMARY"], hdu.name).toEqual(orNull(image.data));
    }
    expect(back.shape).toEqual([7, 5]);
    expect(back.cards[0]).toBe('"o\'clock / noon"');
    expect(Number(back.cards[1])).toBe(1234.5678901234567);
    expect(back.cards[2]).toBe("'left'");
    expect(back.cards[3]).toBe(`"${"it's ".repeat(40).trim()}"`);
    expect(back.cards.slice(4)).toEqual(["12345678901234567890", "None", "-1.2345678901234567e-100", "(1.5-2j)"]);
    expect(back.history).toEqual(["made by hatchel 0.0.1", "option method=joint", "input flat.fits checksum 12ab"]);
    expect(back.table.STATE).toEqual(["lit", "dim", "dead"]);
    expect(back.table.COEF).toEqual(ramp(9, 1.3, -4));
    expect(back.table.GOOD).toEqual([true, false, true]);
    expect(back.table.SHIFT).toEqual([0.5, null, -3.25]);
    expect(back.table.BLOCK).toEqual([7, -1, 3]);
    expect(back.table.LEVEL).toEqual([1, 2, 3, 254, 255, 6]);
    expect(back.table.SERIAL[1]).toBe(-5);
  });
});

describe("checksums", () => {
  test("868229149 encodes as in the worked example of the FITS Standard 4.0, appendix J", () => {
    expect(encodeChecksum(868229149)).toBe("hcHjjc9ghcEghc9g");
  });

  test("the sum of each HDU written is -0", () => {
    const bytes = encodeFits(everyKind().slice(0, 1));
    expect(checksum(bytes).toString(16)).toBe("ffffffff");
  });

  test("sums are ones'-complement sums of big-endian words, wherever the bytes lie", () => {
    // By hand: 0xfedcba98 + 0x81c345e7 = 0x1 80a0007f, end-around carry: 0x80a00080; and a tail of 1 byte, 0x05000000.
    const bytes = Uint8Array.of(0, 0xfe, 0xdc, 0xba, 0x98, 0x81, 0xc3, 0x45, 0xe7, 0x05);
    expect(checksum(bytes.subarray(1)).toString(16)).toBe("85a00080");
  });
});

describe("writing whole or not at all", () => {
  const small = (): OutputHdu[] => [{ kind: "primary", header: [] }];
  const inFolder = () => fs.readdirSync(folder).filter((name) => name.startsWith("."));

  test("an existing file is kept unless force is given", async () => {
    const path = join(folder, "there.fits");
    fs.writeFileSync(path, "mine");
    await expect(writeFits(path, small())).rejects.toThrow(
      `${path}: this file exists already; give another name, or --force to replace it.`,
    );
    expect(fs.readFileSync(path, "utf8")).toBe("mine");
    await writeFits(path, small(), { force: true });
    expect(fs.statSync(path).size).toBe(2880);
  });

  test("an input is never written on: by another path, a symbolic or a hard link, even with force", async () => {
    const input = join(folder, "input.fits");
    fs.writeFileSync(input, "raw");
    fs.symlinkSync(input, join(folder, "soft.fits"));
    fs.linkSync(input, join(folder, "hard.fits"));
    for (const name of ["input.fits", "soft.fits", "hard.fits", "../" + folder.split("/").pop() + "/input.fits"]) {
      await expect(writeFits(join(folder, name), small(), { force: true, inputs: ["-", input] })).rejects.toThrow(
        /: the output would be written on an input; give it another name\.$/,
      );
    }
    expect(fs.readFileSync(input, "utf8")).toBe("raw");
  });

  test("a failure half-way leaves nothing behind, and the old file as it was", async () => {
    const path = join(folder, "half.fits");
    fs.writeFileSync(path, "old");
    const bad: OutputHdu[] = [...small(), { kind: "image", name: "X", nx: 3, ny: 2, data: new Float32Array(5) }];
    await expect(writeFits(path, bad, { force: true })).rejects.toThrow(
      `${path}: X has 5 pixels for 3 × 2; give nx · ny pixels.`,
    );
    expect(fs.readFileSync(path, "utf8")).toBe("old");
    expect(inFolder()).toEqual([]);
  });

  test("a folder that is not there, a folder as a file, a full disk: one sentence each", async () => {
    await expect(writeFits(join(folder, "no/x.fits"), small())).rejects.toThrow(
      "x.fits: the folder does not exist; make it first.",
    );
    await expect(writeFits(folder, small(), { force: true })).rejects.toThrow(": this is a folder; name a file in it.");
    if (fs.existsSync("/dev/full")) {
      await expect(writeFits("/dev/full", small())).rejects.toThrow(
        "/dev/full: the disk is full; make room or write elsewhere.",
      );
    }
  });

  test("what no card can hold is refused", () => {
    const primary = (value: number | string, keyword = "GAIN"): OutputHdu[] => [
      { kind: "primary", header: [{ keyword, value, comment: "" }] },
    ];
    expect(() => encodeFits(primary(Number.NaN))).toThrow(
      "the card GAIN is NaN; leave the card out where there is no value.",
    );
    expect(() => encodeFits(primary("5 µm"))).toThrow(
      "the card GAIN holds the character U+00B5; FITS headers hold ASCII 32-126 only.",
    );
    expect(() => encodeFits(primary(3, "gain"))).toThrow("the card gain is not a FITS keyword");
    expect(() => encodeFits(primary(3, "BZERO"))).toThrow(
      "the card BZERO is set by the writer; pass an input's header through inputCards().",
    );
  });

  test("columns of different lengths and numbers out of range are refused", () => {
    const table = (...columns: Extract<OutputHdu, { kind: "table" }>["columns"]): OutputHdu[] => [
      ...small(),
      { kind: "table", name: "T", columns },
    ];
    const fibre = { name: "FIBRE", format: "I", data: [1, 2] };
    expect(() => encodeFits(table(fibre, { name: "B", format: "2E", data: [1, 2] }))).toThrow(
      "column B has 1 rows and the first has 2; make them equal.",
    );
    expect(() => encodeFits(table({ ...fibre, data: [1, 32768] }))).toThrow(
      "column FIBRE holds 32768, which format I cannot",
    );
    expect(() => encodeFits(table({ ...fibre, data: [1, Number.NaN] }))).toThrow(
      "column FIBRE holds NaN, which format I cannot",
    );
    expect(() => encodeFits(table({ name: "S", format: "3A", data: ["dead"] }))).toThrow(
      'column S, row 1: "dead" is not ASCII text of up to 3 characters',
    );
  });

  test("the same HDUs give the same bytes", () => {
    expect(Buffer.compare(encodeFits(everyKind()), encodeFits(everyKind()))).toBe(0);
  });
});
