import { spawnSync } from "node:child_process";
import fs from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { gzipSync } from "node:zlib";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { encodeFits, type OutputHdu, type PixelArray } from "../../src/fits/encode.js";
import { FitsError } from "../../src/fits/errors.js";
import { readImage } from "../../src/fits/image.js";
import { readTable } from "../../src/fits/table.js";
import { judgeMissing, python } from "../judges.js";

let folder = "";
beforeAll(() => {
  folder = fs.mkdtempSync(join(tmpdir(), "hatchel-image-"));
});
afterAll(() => fs.rmSync(folder, { recursive: true }));

const primaryOnly = (data: PixelArray, nx: number, ny: number): OutputHdu[] => [
  { kind: "primary", header: [{ keyword: "GAIN", value: 1.5, comment: "" }], image: { nx, ny, data, unit: "adu" } },
];
const counts = (n: number, step: number) => Array.from({ length: n }, (_, i) => i * step + (i % 3));
/** Overwrites a card of the same keyword with another text, whatever it stood for. */
function withCard(bytes: Uint8Array, keyword: string, text: string): Buffer {
  const copy = Buffer.from(bytes);
  const at = copy.indexOf(keyword === "END" ? "END".padEnd(80) : `${keyword.padEnd(8)}=`, 0, "latin1");
  copy.write(text.padEnd(80), at, "latin1");
  return copy;
}

describe("what the writer wrote", () => {
  test.each<[string, PixelArray, "Float32Array" | "Float64Array"]>([
    ["unsigned 8", Uint8Array.from(counts(35, 7)), "Float32Array"],
    ["signed 16", Int16Array.from(counts(35, -900)), "Float32Array"],
    ["unsigned 16", Uint16Array.from(counts(35, 1900)), "Float32Array"],
    ["signed 32", Int32Array.from(counts(35, -6e7)), "Float64Array"],
    ["unsigned 32", Uint32Array.from(counts(35, 1.2e8)), "Float64Array"],
    ["single", Float32Array.from(counts(35, 0.1)), "Float32Array"],
    ["double", Float64Array.from(counts(35, 0.1)), "Float64Array"],
  ])("%s bits come back exactly", async (_, data, type) => {
    const image = await readImage(encodeFits(primaryOnly(data, 5, 7)), { name: "a/b.fits" });
    expect([...image.data]).toEqual([...data]);
    expect(image.data.constructor.name).toBe(type);
    expect([image.nx, image.ny, image.unit, image.checksumState, image.name, image.hduIndex]).toEqual([
      5,
      7,
      "adu",
      "right",
      "b.fits",
      0,
    ]);
    expect(image.header.number("GAIN")).toBe(1.5);
    expect(image.warnings).toEqual([]);
  });

  test("from a path, from gzip whatever its name, and from bytes the same", async () => {
    const bytes = encodeFits(primaryOnly(Uint16Array.from(counts(35, 1900)), 5, 7));
    fs.writeFileSync(join(folder, "plain.fits"), bytes);
    fs.writeFileSync(join(folder, "packed.fits"), gzipSync(bytes));
    const [plain, packed, direct] = await Promise.all([
      readImage(join(folder, "plain.fits")),
      readImage(join(folder, "packed.fits")),
      readImage(bytes),
    ]);
    expect([...packed.data]).toEqual([...plain.data]);
    expect([...direct.data]).toEqual([...plain.data]);
    expect(packed.checksum).toBe(plain.checksum);
  });

  test("another header or other data, another digest", async () => {
    const digest = async (bytes: Uint8Array) => (await readImage(bytes)).checksum;
    const bytes = encodeFits(primaryOnly(Uint16Array.from(counts(35, 1900)), 5, 7));
    const otherPixel = Buffer.from(bytes);
    otherPixel[2880 + 69] ^= 1;
    const digests = await Promise.all([bytes, otherPixel, withCard(bytes, "GAIN", "GAIN    = 1.6")].map(digest));
    expect(new Set(digests).size).toBe(3);
    expect(digests[0]).toMatch(/^[0-9a-f]{16}$/);
  });
});

describe("which HDU", () => {
  const three = (): OutputHdu[] => [
    { kind: "primary", header: [] },
    { kind: "table", name: "T", columns: [{ name: "A", format: "J", data: [1, 2] }] },
    { kind: "image", name: "first", nx: 3, ny: 2, data: Float32Array.of(1, 2, 3, 4, 5, 6) },
    { kind: "image", name: "12", nx: 2, ny: 3, data: Float32Array.of(7, 8, 9, 10, 11, 12) },
  ];

  test("the first image when none is named, and a word that there are others", async () => {
    const image = await readImage(encodeFits(three()), { name: "x.fits" });
    expect([image.hduIndex, image.nx]).toEqual([2, 3]);
    expect(image.warnings).toEqual(["x.fits: HDUs 2, 3 all hold images; HDU 2 is used."]);
  });

  test("by number, by digits, by name in any case; a name of digits wins", async () => {
    const bytes = encodeFits(three());
    const index = async (hdu: number | string) => (await readImage(bytes, { hdu })).hduIndex;
    expect(await Promise.all([index(3), index("2"), index("FIRST"), index("12")])).toEqual([3, 2, 2, 3]);
  });

  test("what is not there or no image is refused by name", async () => {
    const bytes = encodeFits(three());
    const refusal = (hdu: number | string) => expect(readImage(bytes, { hdu, name: "x.fits" })).rejects;
    await refusal("SCI").toThrow('x.fits: there is no HDU "SCI"; choose among 0 PRIMARY, 1 T, 2 first, 3 12.');
    await refusal(4).toThrow("x.fits: there is no HDU 4; choose among");
    await refusal(-1).toThrow("x.fits: there is no HDU -1; choose among");
    await refusal(1).toThrow("x.fits: HDU 1: this is a table, not an image; choose another HDU.");
    await refusal(0).toThrow("x.fits: HDU 0: the HDU holds no data; give an image of two axes.");
    const none = encodeFits(three().slice(0, 2));
    await expect(readImage(none, { name: "x.fits" })).rejects.toThrow("x.fits: no HDU holds an image of two axes");
  });
});

describe("damage is met with one sentence", () => {
  const bytes = encodeFits(primaryOnly(Uint16Array.from(counts(35, 1900)), 5, 7));
  const cases: [string, Uint8Array, string, string][] = [
    ["nothing", new Uint8Array(0), "truncated", "0 bytes where a FITS file has at least 2880; fetch it again."],
    [
      "a picture",
      Buffer.alloc(3000, "\x89PNG\r\n\x1a\n", "latin1"),
      "structure",
      'HDU 0: starts with "?PNG????" where SIMPLE = T is expected; give a FITS file.',
    ],
    [
      "cut data",
      bytes.subarray(0, 2900),
      "truncated",
      "HDU 0: the file ends after 20 of 70 bytes of data; fetch it again.",
    ],
    [
      "no END",
      withCard(bytes, "END", "").subarray(0, 2880),
      "truncated",
      "HDU 0: the header has no END card; fetch the file again.",
    ],
    [
      "SIMPLE = F",
      withCard(bytes, "SIMPLE", "SIMPLE  = F"),
      "unsupported",
      "HDU 0: SIMPLE is F; only standard FITS is read.",
    ],
    [
      "BITPIX = 12",
      withCard(bytes, "BITPIX", "BITPIX  = 12"),
      "structure",
      "HDU 0: BITPIX is 12; it must be 8, 16, 32, 64, -32 or -64.",
    ],
    [
      "NAXIS1 < 0",
      withCard(bytes, "NAXIS1", "NAXIS1  = -5"),
      "structure",
      "HDU 0: NAXIS1 is -5; it must be a whole number at least 0.",
    ],
    [
      "huge",
      withCard(bytes, "NAXIS2", "NAXIS2  = 9007199254740991"),
      "structure",
      "HDU 0: the header asks for 90071992547409900 bytes of data; repair BITPIX and NAXISn.",
    ],
    [
      "order",
      withCard(bytes, "NAXIS", "OTHER   = 2"),
      "structure",
      'HDU 0: card 3 is "OTHER" where NAXIS is expected; repair the header.',
    ],
    [
      "BSCALE = 0",
      withCard(bytes, "BSCALE", "BSCALE  = 0"),
      "card",
      "HDU 0: BSCALE is 0, which makes every pixel equal; correct that card.",
    ],
    [
      "text scale",
      withCard(bytes, "BZERO", "BZERO   = 'no'"),
      "card",
      "HDU 0: BZERO is 'no' where a number is expected; correct that card.",
    ],
    ["cut gzip", gzipSync(bytes).subarray(0, 100), "truncated", "the gzip file ends early; fetch it again."],
    [
      "bad gzip",
      Buffer.from([0x1f, 0x8b, 1, 2, 3, 4, 5, 6, 7, 8, 9, 10]),
      "unreadable",
      "the gzip file does not unpack (unknown compression method); fetch it again.",
    ],
  ];
  test.each(cases)("%s", async (_, damaged, code, sentence) => {
    const error = await readImage(damaged, { name: "x.fits" }).catch((caught: unknown) => caught);
    expect(error).toBeInstanceOf(FitsError);
    expect((error as FitsError).message).toBe(`x.fits: ${sentence}`);
    expect((error as FitsError).code).toBe(code);
  });

  test("the error knows the card and its place in the file", async () => {
    const error = (await readImage(withCard(bytes, "BITPIX", "BITPIX  = 12")).catch(
      (caught: unknown) => caught,
    )) as FitsError;
    expect([error.hdu, error.byteOffset, error.card]).toEqual([0, 80, "BITPIX"]);
  });

  test("files that are not there, folders and devices", async () => {
    await expect(readImage(join(folder, "no.fits"))).rejects.toThrow("no.fits: there is no such file; check the name.");
    await expect(readImage(folder)).rejects.toThrow(": this is a folder; name a file in it.");
    if (fs.existsSync("/dev/zero"))
      await expect(readImage("/dev/zero")).rejects.toThrow("/dev/zero: this is a device; give a FITS file.");
  });

  test("cubes are refused, extra axes of length 1 are not", async () => {
    const image = encodeFits(primaryOnly(Float32Array.from(counts(30, 2)), 5, 6));
    const axes = (n3: number, ny: number) => {
      const text = Buffer.from(image.subarray(0, 2880)).toString("latin1");
      const at = text.indexOf("NAXIS2  ");
      const changed = (
        text.slice(0, at) +
        `NAXIS2  = ${ny}`.padEnd(80) +
        `NAXIS3  = ${n3}`.padEnd(80) +
        text.slice(at + 80)
      ).slice(0, 2880);
      return Buffer.concat([
        Buffer.from(changed.replace("NAXIS   =                    2", "NAXIS   =                    3"), "latin1"),
        image.subarray(2880),
      ]);
    };
    await expect(readImage(axes(2, 3), { name: "x.fits" })).rejects.toThrow(
      "x.fits: HDU 0: the HDU holds 5 × 3 × 2 pixels; give an image of two axes.",
    );
    expect([...(await readImage(axes(1, 6))).data]).toEqual(counts(30, 2).map(Math.fround));
  });
});

describe("odd but harmless", () => {
  const bytes = encodeFits(primaryOnly(Int16Array.from(counts(35, 900)), 5, 7));
  const expected = [...Int16Array.from(counts(35, 900))];
  const cases: [string, Uint8Array, string][] = [
    [
      "junk at the end",
      Buffer.concat([bytes, Buffer.alloc(1000, "x")]),
      "x.fits: 1000 bytes after the last HDU are left aside.",
    ],
    [
      "padding cut",
      bytes.subarray(0, 2880 + 70),
      "x.fits: the padding after the last HDU is cut short; its data are whole.",
    ],
    [
      "a wrong checksum",
      withCard(bytes, "GAIN", "GAIN    = 1.6"),
      "x.fits: HDU 0: the checksum is wrong; the file has been changed or damaged.",
    ],
    [
      "a letter with an accent",
      withCard(bytes, "GAIN", "GAIN    = 'caf\u00e9'"),
      "x.fits: HDU 0: characters that are not ASCII 32-126 stand in the header and are read as question marks.",
    ],
    [
      "a card that is none",
      withCard(bytes, "GAIN", "GAIN    = 1.5.6"),
      'x.fits: HDU 0: GAIN has a value that is not one of the FITS forms, "1.5.6", and this card is left aside.',
    ],
  ];
  test.each(cases)("%s: right, with a warning", async (_, odd, warning) => {
    const image = await readImage(odd, { name: "x.fits" });
    expect([...image.data]).toEqual(expected);
    expect(image.warnings).toContain(warning);
  });
});

const WRITE_PIXELS = `
import sys, json, numpy as np
from astropy.io import fits
rng = np.random.default_rng(5)
folder = sys.argv[1]
out = []
types = {8: 'u1', 16: '>i2', 32: '>i4', 64: '>i8', -32: '>f4', -64: '>f8'}
for bitpix, kind in types.items():
    for scale, zero in [(1, 0), (1, 32768), (1, 0.5), (2.5, -3), (-0.001, 1e4), (1, 2147483648)]:
        for blank in (None, 7):
            for shape in ((7, 13), (1, 5, 4)):
                if bitpix > 0:
                    lo, hi = (0, 255) if bitpix == 8 else (-2**(bitpix-1), 2**(bitpix-1) - 1)
                    raw = rng.integers(lo, hi, size=shape, dtype='i8', endpoint=True)
                    raw.flat[3] = 7
                    raw.flat[4] = lo
                else:
                    raw = rng.normal(size=shape) * 10.0 ** rng.integers(-5, 5, size=shape)
                    raw.flat[3] = np.nan
                raw = raw.astype(kind)
                hdu = fits.PrimaryHDU(raw)
                hdu.header['BSCALE'] = scale
                hdu.header['BZERO'] = zero
                if blank is not None and bitpix > 0: hdu.header['BLANK'] = blank
                path = '%s/p%d.fits' % (folder, len(out))
                hdu.writeto(path, checksum=len(out) % 2 == 0)
                # Scaled here, in double precision: astropy itself scales 16 bits in single.
                back = fits.open(path, do_not_scale_image_data=True)[0].data
                v = back.astype('f8') * scale + zero
                if blank is not None and bitpix > 0: v[back == blank] = np.nan
                out.append({'path': path, 'shape': list(shape[-2:]), 'bitpix': bitpix, 'sum': len(out) % 2 == 0,
                            'values': [None if x != x else x for x in v.ravel().tolist()]})
print(json.dumps(out))
`;

describe.skipIf(judgeMissing("astropy"))("images written by astropy", () => {
  test("all pixel types, scalings, blanks and checksums", async () => {
    const written: { path: string; shape: number[]; bitpix: number; sum: boolean; values: (number | null)[] }[] =
      JSON.parse(python(WRITE_PIXELS, [folder]));
    expect(written.length).toBe(144);
    for (const one of written) {
      const image = await readImage(one.path);
      expect([image.ny, image.nx, image.bitpix]).toEqual([...one.shape, one.bitpix]);
      expect(image.checksumState, one.path).toBe(one.sum ? "right" : "absent");
      expect(
        Array.from(image.data, (v) => (Number.isNaN(v) ? null : v)),
        one.path,
      ).toEqual(one.values);
    }
  });
});

const WRITE_FOR_FPACK = `
import sys, numpy as np
from astropy.io import fits
rng = np.random.default_rng(9)
folder = sys.argv[1]
y, x = np.mgrid[0:37, 0:53]
smooth = 300 + 40 * np.sin(x / 5.0) + y
for name, data in {
    'u1': rng.poisson(smooth / 4).clip(0, 255).astype('u1'),
    'i2': (rng.poisson(smooth) - 300).astype('i2'),
    'u2': np.where(x % 17 == 3, 65535, rng.poisson(smooth)).astype('u2'),
    'i4': rng.integers(-2**31, 2**31, size=smooth.shape).astype('i4'),
    'n1': rng.integers(0, 256, size=smooth.shape).astype('u1'),
    'n2': rng.integers(-2**15, 2**15, size=smooth.shape).astype('i2'),
    'i4s': (rng.poisson(smooth) * 1000).astype('i4'),
    'f4': np.where(x + y == 20, np.nan, rng.normal(smooth, 5)).astype('f4'),
    'f8': rng.normal(smooth, 5),
    'zero': np.where((x * y) % 5 == 0, 0, rng.normal(smooth, 5)).astype('f4'),
}.items():
    fits.PrimaryHDU(data).writeto('%s/%s.fits' % (folder, name), overwrite=True)
`;

describe.skipIf(judgeMissing("fpack") || judgeMissing("funpack") || judgeMissing("astropy"))(
  "tiles packed by fpack",
  () => {
    const kinds = ["u1", "n1", "i2", "n2", "u2", "i4", "i4s", "f4", "f8", "zero"];
    const ways = [
      ["-r"],
      ["-g1"],
      ["-g2"],
      ["-r", "-qz", "4"],
      ["-r", "-q0", "8"],
      ["-g2", "-q", "0"],
      ["-r", "-t", "20,9"],
      ["-r", "-q", "2", "-w"],
    ];
    beforeAll(() => python(WRITE_FOR_FPACK, [folder]));

    // funpack itself goes wrong where tiles of several rows hold NaN; see the next test.
    const pairs = kinds.flatMap((kind) => ways.map((way) => [kind, way.join(" ")]));
    test.each(pairs.filter(([kind, way]) => !(kind === "f4" && way.includes("-t"))))(
      "%s by fpack %s: as funpack unpacks it",
      async (kind, way) => {
        const packed = join(folder, `${kind}-${way.replaceAll(/[ ,]/g, "_")}.fits`);
        fs.copyFileSync(join(folder, `${kind}.fits`), packed);
        const pack = spawnSync("fpack", [...way.split(" "), packed]);
        expect(pack.status, String(pack.stderr) + pack.stdout).toBe(0);
        expect(spawnSync("funpack", ["-O", `${packed}.out`, `${packed}.fz`]).status).toBe(0);
        const image = await readImage(`${packed}.fz`);
        const truth = await readImage(`${packed}.out`);
        expect([image.nx, image.ny, image.bitpix]).toEqual([53, 37, truth.bitpix]);
        expect(image.checksumState).toBe("right");
        expect([...image.data]).toEqual([...truth.data]);
      },
    );

    test("tiles of several rows with NaN: the frame itself, to half a step of the quantiser", async () => {
      const packed = join(folder, "f4-nan.fits");
      fs.copyFileSync(join(folder, "f4.fits"), packed);
      expect(spawnSync("fpack", ["-r", "-t", "20,9", packed]).status).toBe(0);
      const image = await readImage(`${packed}.fz`);
      const truth = await readImage(join(folder, "f4.fits"));
      const { columns } = await readTable(`${packed}.fz`, 1, { columns: ["ZSCALE"] });
      expect(columns[0].data.length).toBe(15);
      expect(truth.data.filter(Number.isNaN).length).toBe(21);
      for (let i = 0; i < truth.data.length; i++) {
        const tile = 3 * Math.floor(Math.floor(i / 53) / 9) + Math.floor((i % 53) / 20);
        const step = columns[0].data[tile] as number;
        if (Number.isNaN(truth.data[i])) expect(image.data[i]).toBe(Number.NaN);
        // Single precision near 400 adds 2⁻¹⁵.
        else expect(Math.abs(image.data[i] - truth.data[i])).toBeLessThanOrEqual(step / 2 + 2 ** -15);
      }
    });

    test.each([
      ["-h", "HCOMPRESS_1"],
      ["-p", "PLIO_1"],
    ])("fpack %s is refused by name", async (way, name) => {
      const packed = join(folder, `refused${way}.fits`);
      fs.copyFileSync(join(folder, "u1.fits"), packed);
      expect(spawnSync("fpack", [way, packed]).status).toBe(0);
      await expect(readImage(`${packed}.fz`)).rejects.toThrow(
        `HDU 1: tiles compressed by ${name} are not read; unpack the file first.`,
      );
    });
  },
);

const uglyFrames = new URL("../../../shared/frames/ugly/", import.meta.url).pathname;
describe.skipIf(!fs.existsSync(uglyFrames))("frames from elsewhere, where they lie beside the repository", () => {
  test("Rice tiles, gzip, an extension and trailing bytes give the frame that is also there plain", async () => {
    const plain = await readImage(join(uglyFrames, "../night/raw/sci_01.fits"));
    for (const name of ["rice.fits.fz", "packed.fits.gz", "extension.fits", "trailing.fits"]) {
      const image = await readImage(join(uglyFrames, name));
      expect(
        Buffer.compare(
          Buffer.from(new Uint8Array(image.data.buffer, image.data.byteOffset, image.data.byteLength)),
          Buffer.from(new Uint8Array(plain.data.buffer, plain.data.byteOffset, plain.data.byteLength)),
        ),
        name,
      ).toBe(0);
    }
  });
});
