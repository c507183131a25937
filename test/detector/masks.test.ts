import { describe, expect, it } from "vitest";
import { detectorLayout } from "../../src/detector/amplifiers.js";
import { assemble } from "../../src/detector/assemble.js";
import { badPixelMask } from "../../src/detector/badpixels.js";
import { MaskBit } from "../../src/detector/frame.js";
import { frameWarnings } from "../../src/detector/frameSanity.js";
import { normalDeviate } from "../scene.js";
import { type Cards, ONE_AMPLIFIER, rawFrame, seeded } from "./rawFrames.js";

function noisy(change: (x: number, y: number) => number | undefined, cards: Cards = ONE_AMPLIFIER, seed = 1) {
  const next = seeded(seed);
  return rawFrame("raw.fits", 124, 80, cards, (x, y) => {
    const value = Math.round(1000 + (x < 100 ? 300 : 0) + 2.1 * normalDeviate(next));
    return change(x, y) ?? value;
  });
}

const assembled = (raw: ReturnType<typeof noisy>) => assemble(raw, detectorLayout(raw));
/** [x, y] of pixels with this bit. */
function pixelsWith(bit: number, { mask, nx }: ReturnType<typeof assembled>): [number, number][] {
  return [...mask.entries()].filter(([, bits]) => bits & bit).map(([at]) => [at % nx, Math.floor(at / nx)]);
}

describe("saturation", () => {
  it("marks a pixel and its neighbours along the column, not along the row", () => {
    const frame = assembled(noisy((x, y) => (x === 17 && y === 30 ? 60000 : undefined)));
    expect(pixelsWith(MaskBit.saturated, frame)).toEqual([
      [17, 29],
      [17, 30],
      [17, 31],
    ]);
    expect(frame.nSaturated).toBe(1);
  });

  it("grows further from a bleed, and stops at the edge of the data", () => {
    const frame = assembled(noisy((x, y) => (x === 3 && y >= 70 ? 61000 : undefined)));
    const rows = pixelsWith(MaskBit.saturated, frame).map(([, y]) => y);
    expect([rows.length, rows[0], rows[rows.length - 1]]).toEqual([13, 67, 79]);
  });

  it("follows file columns when dispersion runs along axis 2", () => {
    const raw = noisy((x, y) => (x === 17 && y === 30 ? 60000 : undefined), { ...ONE_AMPLIFIER, DISPAXIS: 2 });
    expect(pixelsWith(MaskBit.saturated, assembled(raw))).toEqual([
      [29, 17],
      [30, 17],
      [31, 17],
    ]);
  });

  it("keeps to a 16-bit converter's ceiling when the header claims more", () => {
    const raw = noisy((x, y) => (x === 50 && y === 9 ? 65535 : undefined), { ...ONE_AMPLIFIER, SATURATE: 100000 });
    expect(assembled(raw).nSaturated).toBe(1);
  });
});

describe("missing values", () => {
  it("are NaN pixels, constant columns and rows, and zeros far below the overscan", () => {
    const raw = noisy((x, y) => {
      if (x === 5 && y === 6) return Number.NaN;
      if (x === 20 || x === 21) return 0;
      if (y === 44 && x < 100) return 977;
      return x === 60 && y === 61 ? 0 : undefined;
    });
    const frame = assembled(raw);
    expect(frame.missing).toMatchObject({ nanPixels: 1, constantColumns: 2, constantRows: 1 });
    const missing = pixelsWith(MaskBit.missing, frame);
    expect(missing.length).toBe(1 + 2 * 80 + 98 + 1);
    expect(frame.electrons[61 * 100 + 60]).toBeNaN();
    expect(frame.electrons[44 * 100 + 70]).toBeNaN();
    expect(frameWarnings(frame)).toContain("raw.fits: 2 columns hold one constant (dropped readout) and are masked.");
  });

  it("a column full of saturated pixels is a bleed, not a dropped readout", () => {
    const frame = assembled(noisy((x) => (x === 20 ? 60000 : undefined)));
    expect(frame.missing.constantColumns).toBe(0);
    expect(pixelsWith(MaskBit.saturated, frame).length).toBe(80);
  });

  it("a frame without noise is not missing, one without picture is refused", () => {
    const calm = rawFrame("raw.fits", 124, 80, ONE_AMPLIFIER, (x) => (x < 100 ? 1300 + x : 1000));
    expect(assembled(calm).missing.constantColumns).toBe(0);
    const flat = rawFrame("raw.fits", 124, 80, ONE_AMPLIFIER, () => 1000);
    expect(() => assembled(flat)).toThrow(
      "raw.fits: every pixel of the data section is 1000 ADU, but a picture was expected; the readout failed, take another frame.",
    );
  });

  it("hold between amplifiers where nothing was read", () => {
    const frame = assembled(
      noisy(() => undefined, {
        NAMPS: 2,
        GAIN: 1.6,
        RDNOISE: 3.3,
        DATASEC1: "[1:50,1:80]",
        DATASEC2: "[51:100,1:80]",
        BIASSEC1: "[101:112,1:80]",
        BIASSEC2: "[113:124,1:80]",
        CCDSEC1: "[1:50,1:80]",
        CCDSEC2: "[55:104,1:80]",
      }),
    );
    expect(frame.nx).toBe(104);
    expect(pixelsWith(MaskBit.missing, frame).length).toBe(4 * 80);
    expect(frame.electrons[52]).toBeNaN();
  });
});

describe("bad-pixel image", () => {
  const { geometry } = detectorLayout(noisy(() => undefined));
  const turned = detectorLayout(noisy(() => undefined, { ...ONE_AMPLIFIER, DISPAXIS: 2 })).geometry;
  const image = rawFrame("bad.fits", 100, 80, {}, (x, y) =>
    x === 7 && y > 40 ? 3 : x === 9 && y === 2 ? Number.NaN : 0,
  );

  it("marks what is not 0, turned as the frame is", () => {
    const mask = badPixelMask(image, geometry);
    expect(mask.reduce((sum, bit) => sum + bit, 0)).toBe(40);
    expect([mask[41 * 100 + 7], mask[40 * 100 + 7], mask[2 * 100 + 9]]).toEqual([MaskBit.bad, 0, MaskBit.bad]);
    const other = badPixelMask(image, turned);
    expect([other[7 * 80 + 41], other[7 * 80 + 40], other[9 * 80 + 2]]).toEqual([MaskBit.bad, 0, MaskBit.bad]);
  });

  it("must have the assembled frame's size, and good pixels at 0", () => {
    const raw = rawFrame("bad.fits", 124, 80, {}, () => 0);
    expect(() => badPixelMask(raw, geometry)).toThrow(
      "bad.fits: 124 × 80 pixels, but the assembled frame has 100 × 80; a bad-pixel image shows the frame without overscan.",
    );
    const inverted = rawFrame("bad.fits", 100, 80, {}, (x) => (x === 7 ? 0 : 1));
    expect(() => badPixelMask(inverted, geometry)).toThrow(
      "bad.fits: 7920 of 8000 pixels are not 0 and so bad; in a bad-pixel image good pixels are 0.",
    );
  });
});
