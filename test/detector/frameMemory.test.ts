/** A frame in kernel memory against the same frame in arrays of its own: the same bits, and room behind them. */
import { expect, it, test } from "vitest";
import { noCalibrations } from "../../src/detector/calibrations.js";
import { correctFrame } from "../../src/detector/correct.js";
import type { RawImage } from "../../src/detector/raw.js";
import { encodeFits } from "../../src/fits/encode.js";
import { readImage } from "../../src/fits/image.js";
import { loadKernels } from "../../src/kernels/module.js";
import { type Cards, ONE_AMPLIFIER, rawFrame, seeded } from "./rawFrames.js";

const [NX, NY] = [124, 80];

/** With a hot pixel that bled, a dead column, a dead row and a hole. */
function noisyFrame(cards: Cards): RawImage {
  const random = seeded(71);
  const raw = rawFrame("noisy.fits", NX, NY, cards, (x, y) => {
    if (x < 100 && (y === 61 || x === 40)) return 7;
    if (x === 70 && y > 20 && y < 33) return 61000;
    return x === 17 && y === 3 ? 0 : Math.round(1000 + (x < 100 ? 3 * x + y : 0) + 8 * random());
  });
  return { ...raw, data: Float32Array.from(raw.data) };
}

const LAYOUTS: [what: string, cards: Cards][] = [
  ["along axis 1", ONE_AMPLIFIER],
  ["along axis 2", { ...ONE_AMPLIFIER, DISPAXIS: 2 }],
  ["with a gap in the assembled frame", { ...ONE_AMPLIFIER, CCDSEC: "[4:103,3:82]" }],
];

test.each(LAYOUTS)(
  "electrons and mask lie in one memory, electrons first, with room for more: %s",
  async (_, cards) => {
    const kernels = await loadKernels();
    const plain = correctFrame(noisyFrame(cards), noCalibrations());
    const { electrons, mask, memory } = correctFrame({ ...noisyFrame(cards), kernels }, noCalibrations());
    expect(plain.memory).toBeUndefined();
    expect(electrons).toEqual(plain.electrons);
    expect(mask).toEqual(plain.mask);
    expect(new Set(mask).size).toBeGreaterThan(2);
    expect(electrons.buffer).toBe(memory!.memory.buffer);
    expect(mask.buffer).toBe(memory!.memory.buffer);
    const more = memory!.float32(8 * electrons.length);
    expect(mask.byteOffset).toBeGreaterThanOrEqual(electrons.byteOffset + electrons.byteLength);
    expect(more.byteOffset).toBeGreaterThanOrEqual(mask.byteOffset + mask.byteLength);
  },
);

it("takes the place of a raw frame that was read for it, and no other's", async () => {
  const { data, header } = noisyFrame(ONE_AMPLIFIER);
  const image = { nx: NX, ny: NY, data: Uint16Array.from(data) };
  const file = encodeFits([{ kind: "primary", header: header.cards, image }]);
  const kept = await readImage(file);
  const given = await readImage(file, { forFrame: true });
  const plain = correctFrame({ ...kept, data: Float64Array.from(kept.data) }, noCalibrations());
  const apart = correctFrame(kept, noCalibrations());
  const frame = correctFrame(given, noCalibrations());
  expect(frame.memory).toBe(given.memory);
  expect(apart.memory).not.toBe(kept.memory);
  for (const { electrons, mask } of [apart, frame]) {
    expect(electrons).toEqual(plain.electrons);
    expect(mask).toEqual(plain.mask);
  }
  expect([...kept.data]).toEqual([...image.data]);
  // The frame lies in front of the raw pixels, and what works on it behind its mask, where they lay.
  expect(frame.mask.byteOffset + frame.mask.length).toBeLessThanOrEqual(given.data.byteOffset);
  const next = frame.memory!.uint8(1).byteOffset;
  expect(next).toBeGreaterThanOrEqual(frame.mask.byteOffset + frame.mask.length);
  expect(next).toBeLessThanOrEqual(given.data.byteOffset);
});
