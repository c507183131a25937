import { Buffer } from "node:buffer";
import fc from "fast-check";
import { beforeAll, describe, expect, test } from "vitest";
import { type Kernels, loadKernels } from "../src/kernels/module.js";
import { decodePixels, decodingBytes, fitsFloat32 } from "../src/kernels/pixels.js";
import { decodePixels as decodeByReference, type PixelScaling } from "../src/reference/pixels.js";

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

function byKernel(stored: Uint8Array, n: number, scaling: PixelScaling) {
  return decodePixels(kernels.workbench(decodingBytes(n, scaling)), n, scaling, (room) => {
    expect(room.length).toBe(stored.length);
    room.set(stored);
  });
}

const bitpixes = [8, 16, 32, 64, -32, -64];
const integers = fc.bigInt({ min: -(2n ** 63n), max: 2n ** 63n - 1n });
const scalings = fc.record({
  bitpix: fc.constantFrom(...bitpixes),
  scale: fc.constantFrom(1, 1, 1, -2.5, 1e-9),
  zero: fc.constantFrom(0, 0, 32768, -128, 2147483648, 2 ** 63, 0.1, 2 ** 24 + 1),
  blank: fc.option(fc.oneof(fc.constantFrom(0n, -1n, 255n, -32768n, 65535n), integers), { nil: undefined }),
});

describe("kernel against reference", () => {
  test("any bytes, any scaling, any length: the same numbers to the bit", () => {
    fc.assert(
      fc.property(scalings, fc.uint8Array({ maxLength: 400 }), fc.boolean(), (scaling, bytes, blankInData) => {
        const width = Math.abs(scaling.bitpix) / 8;
        const n = Math.floor(bytes.length / width);
        const stored = bytes.slice(0, n * width);
        // Half of the time the blank is a value that does occur.
        if (blankInData && n > 0 && scaling.bitpix > 0) {
          const plain = { bitpix: scaling.bitpix, scale: 1, zero: 0 };
          const last = decodeByReference(stored, n, plain)[n - 1];
          if (Number.isSafeInteger(last)) scaling.blank = BigInt(last);
        }
        const kernel = byKernel(stored, n, scaling);
        const reference = decodeByReference(stored, n, scaling);
        expect(kernel instanceof Float32Array).toBe(fitsFloat32(scaling));
        expect([...kernel]).toEqual([...reference]);
      }),
      { seed: 20240917, numRuns: 3000 },
    );
  });
});

describe("kernel against numbers written down", () => {
  test("16 bits with BZERO = 32768 are unsigned numbers (FITS Standard 4.0, table 11), in vector and tail alike", () => {
    // 11 pixels: one vector of 8 and a tail of 3.
    const values = [0, 1, 32767, 32768, 32769, 65535, 258, 513, 40000, 255, 256];
    const stored = Buffer.alloc(22);
    values.forEach((v, i) => {
      stored.writeInt16BE(v - 32768, 2 * i);
    });
    const scaling = { bitpix: 16, scale: 1, zero: 32768 };
    expect([...byKernel(stored, 11, scaling)]).toEqual(values);
    // −32511 is stored for 257; −32510 for 258, which stands in the vector, and BLANK counts before BZERO.
    const blanked = byKernel(stored, 11, { ...scaling, blank: -32510 });
    expect([...blanked]).toEqual(values.map((v) => (v === 258 ? Number.NaN : v)));
    const blankedTail = byKernel(stored, 11, { ...scaling, blank: 255 - 32768 });
    expect([...blankedTail]).toEqual(values.map((v) => (v === 255 ? Number.NaN : v)));
  });

  test("a blank that 16 bits cannot hold blanks nothing, though its low bits match", () => {
    const stored = Buffer.from([0, 5, 0, 6, 0, 7, 0, 8, 0, 9, 0, 10, 0, 11, 0, 12, 0, 5]);
    const values = byKernel(stored, 9, { bitpix: 16, scale: 1, zero: 0, blank: 65536 + 5 });
    expect([...values]).toEqual([5, 6, 7, 8, 9, 10, 11, 12, 5]);
  });

  test("64 bits: unsigned numbers are rounded once, and blank is compared before rounding", () => {
    const stored = Buffer.alloc(24);
    stored.writeBigInt64BE(2n ** 63n - 1n, 0);
    stored.writeBigInt64BE(-(2n ** 63n) + 3n, 8);
    stored.writeBigInt64BE(9007199254740993n, 16);
    const scaling = { bitpix: 64, scale: 1, zero: 2 ** 63 };
    expect([...byKernel(stored, 3, scaling)]).toEqual([2 ** 64, 3, 2 ** 63 + 2 ** 53]);
    // 2⁵³ + 1 is stored; 2⁵³ rounds to the same double but is another number.
    const plain = { bitpix: 64, scale: 1, zero: 0 };
    expect(byKernel(stored, 3, { ...plain, blank: 9007199254740992n })[2]).toBe(9007199254740992);
    expect(byKernel(stored, 3, { ...plain, blank: 9007199254740993n })[2]).toBe(Number.NaN);
  });

  test("floats keep NaN, infinities and the sign of zero", () => {
    const stored = Buffer.alloc(20);
    [1.5, Number.NaN, Number.NEGATIVE_INFINITY, -0, 1e-45].forEach((v, i) => {
      stored.writeFloatBE(v, 4 * i);
    });
    const values = byKernel(stored, 5, { bitpix: -32, scale: 1, zero: 0, blank: 0 });
    expect([...values]).toEqual([1.5, Number.NaN, Number.NEGATIVE_INFINITY, -0, Math.fround(1e-45)]);
  });
});

describe("impossible arguments", () => {
  test("are refused before memory is touched", () => {
    const scaling = { bitpix: 16, scale: 1, zero: 0 };
    expect(() => decodingBytes(1.5, scaling)).toThrow("1.5 pixels asked for; give a whole number from 0.");
    expect(() => decodingBytes(3, { ...scaling, bitpix: 12 })).toThrow("bitpix is 12; give 8, 16, 32, 64, -32 or -64.");
    expect(() => kernels.workbench(decodingBytes(2 ** 31, scaling))).toThrow("4 GiB is the limit");
  });
});
