/** A frame in kernel memory against the same frame in arrays of its own: the same bits, and room behind them. */
import { expect, it } from "vitest";
import { noCalibrations } from "../../src/detector/calibrations.js";
import { correctFrame } from "../../src/detector/correct.js";
import { loadKernels } from "../../src/kernels/module.js";
import { ONE_AMPLIFIER, rawFrame, seeded } from "./rawFrames.js";

const [NX, NY] = [124, 80];

function noisyFrame() {
  const random = seeded(71);
  return rawFrame("noisy.fits", NX, NY, ONE_AMPLIFIER, (x, y) =>
    x === 17 && y === 3 ? Number.NaN : Math.round(1000 + (x < 100 ? 3 * x + y : 0) + 8 * random()),
  );
}

it("puts electrons and mask into one memory, electrons first, with room for more", async () => {
  const kernels = await loadKernels();
  const plain = correctFrame(noisyFrame(), noCalibrations());
  const { electrons, mask, memory } = correctFrame({ ...noisyFrame(), kernels }, noCalibrations());
  expect(plain.memory).toBeUndefined();
  expect(electrons).toEqual(plain.electrons);
  expect(mask).toEqual(plain.mask);
  expect(electrons.buffer).toBe(memory!.memory.buffer);
  expect(mask.buffer).toBe(memory!.memory.buffer);
  const more = memory!.float32(8 * electrons.length);
  expect(mask.byteOffset).toBeGreaterThanOrEqual(electrons.byteOffset + electrons.byteLength);
  expect(more.byteOffset).toBeGreaterThanOrEqual(mask.byteOffset + mask.byteLength);
});
