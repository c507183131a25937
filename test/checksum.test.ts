/** Checksums and byte order: kernel against reference, the FITS standard's rule for the sum written out with whole numbers of
 * any length, and Node's own DataView. */
import fc from "fast-check";
import { describe, expect, test } from "vitest";
import * as byKernel from "../src/kernels/checksum.js";
import { loadKernels } from "../src/kernels/module.js";
import { addChecksums, checksum, toBigEndian } from "../src/reference/checksum.js";

const kernels = await loadKernels();

function inMemory(bytes: Uint8Array, shift = 0) {
  const bench = kernels.workbench(bytes.length + shift);
  const own = bench.uint8(bytes.length + shift).subarray(shift);
  own.set(bytes);
  return { bench, own };
}

/** FITS Standard 4.0, appendix J: big-endian words added, carries past 2³² added at the other end. */
function byTheStandard(bytes: Uint8Array): number {
  const padded = new Uint8Array(Math.ceil(bytes.length / 4) * 4);
  padded.set(bytes);
  const view = new DataView(padded.buffer);
  let sum = 0n;
  for (let at = 0; at < padded.length; at += 4) sum += BigInt(view.getUint32(at));
  while (sum >> 32n) sum = (sum & 0xffffffffn) + (sum >> 32n);
  return Number(sum);
}

describe("the sum", () => {
  test("of any bytes, wherever they start", () => {
    const bytes = fc.oneof(
      fc.uint8Array({ maxLength: 200 }),
      fc.nat(90).map((n) => new Uint8Array(n).fill(255)),
    );
    fc.assert(
      fc.property(bytes, fc.nat(3), (given, shift) => {
        const { bench, own } = inMemory(given, shift);
        const expected = byTheStandard(given);
        expect(byKernel.checksum(bench, own)).toBe(expected);
        expect(checksum(given)).toBe(expected);
      }),
      { seed: 20250313, numRuns: 1500 },
    );
  });

  test("of two parts is the sum of the sums", () => {
    const bytes = Uint8Array.from({ length: 4001 }, (_, i) => (i * 197 + 31) & 255);
    const { bench, own } = inMemory(bytes);
    const parts = [own.subarray(0, 2044), own.subarray(2044)].map((part) => byKernel.checksum(bench, part));
    expect(addChecksums(parts[0], parts[1])).toBe(byTheStandard(bytes));
  });

  test("is refused of bytes elsewhere", () => {
    expect(() => byKernel.checksum(kernels.workbench(8), new Uint8Array(4))).toThrow("outside of the kernels' memory");
  });
});

describe("big-endian", () => {
  const kinds = [
    { width: 1, unsigned: false, put: (view: DataView, at: number, value: number) => view.setUint8(at, value) },
    { width: 2, unsigned: false, put: (view: DataView, at: number, value: number) => view.setUint16(at, value) },
    { width: 2, unsigned: true, put: (view: DataView, at: number, value: number) => view.setInt16(at, value - 32768) },
    { width: 4, unsigned: false, put: (view: DataView, at: number, value: number) => view.setUint32(at, value) },
    {
      width: 4,
      unsigned: true,
      put: (view: DataView, at: number, value: number) => view.setInt32(at, value - 2 ** 31),
    },
    { width: 8, unsigned: false, put: (view: DataView, at: number, value: number) => view.setFloat64(at, value) },
  ];
  test.each(kinds)("numbers of $width bytes, unsigned: $unsigned", ({ width, unsigned, put }) => {
    const values = Array.from({ length: 37 }, (_, i) => (i * 2654435761) % 2 ** Math.min(32, 8 * width));
    const type = { 1: Uint8Array, 2: Uint16Array, 4: Uint32Array, 8: Float64Array }[width]!;
    const native = new Uint8Array(type.from(values).buffer);
    const expected = new DataView(new ArrayBuffer(37 * width));
    for (const [i, value] of values.entries()) put(expected, i * width, value);
    const { bench, own } = inMemory(native);
    byKernel.toBigEndian(bench, own, width, unsigned);
    expect([...own]).toEqual([...new Uint8Array(expected.buffer)]);
    toBigEndian(native, width, unsigned);
    expect([...native]).toEqual([...new Uint8Array(expected.buffer)]);
  });
});
