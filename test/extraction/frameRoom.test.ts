/** Extraction in the frame's own memory against that in a memory of its own: the same bits, several times over. */
import { expect, it } from "vitest";
import type { Frame } from "../../src/detector/frame.js";
import { extractFrame } from "../../src/extraction/extract.js";
import { frameBytes, reserveFrameRoom } from "../../src/kernels/frameRoom.js";
import { loadKernels } from "../../src/kernels/module.js";
import { TraceError } from "../../src/tramlines/errors.js";
import { frameScene } from "./frames.js";

const { frame, tramlines } = frameScene({ seed: 5 }, [2]);
// One pixel without a value, marked as a corrected frame has it.
frame.electrons[1234] = Number.NaN;
frame.mask[1234] = 16;

/** The frame in kernel memory whose room holds what something else left there. */
async function inMemory(): Promise<Frame> {
  const nPixel = frame.electrons.length;
  const memory = reserveFrameRoom(await loadKernels(), nPixel, frameBytes(nPixel));
  const electrons = memory.float32(nPixel);
  const mask = memory.uint8(nPixel);
  memory.uint8(40 * nPixel).fill(0x7f);
  electrons.set(frame.electrons);
  mask.set(frame.mask);
  return { ...frame, electrons, mask, memory };
}

it("gives the same bits, whatever lay in the room, and leaves the frame as it is", async () => {
  const here = await inMemory();
  for (const precision of ["f64", "f32"] as const) {
    const options = { precision, shift: false };
    const plain = await extractFrame(frame, tramlines, options);
    const fresh = await inMemory();
    const { spectra, rejected, nRejected, fit } = await extractFrame(fresh, tramlines, options);
    expect(spectra.flux.buffer).toBe(fresh.memory!.memory.buffer);
    expect(spectra).toEqual(plain.spectra);
    expect(rejected).toEqual(plain.rejected);
    expect(nRejected).toBe(plain.nRejected);
    expect(fit.flux).toEqual(plain.fit.flux);
    expect(fresh.electrons).toEqual(here.electrons);
    expect(fresh.mask).toEqual(here.mask);
  }
});

it("finds the same shift, names and background there", async () => {
  const plain = await extractFrame(frame, tramlines);
  const fresh = await inMemory();
  const { spectra, shift, oneOff, background } = await extractFrame(fresh, tramlines);
  expect(plain.shift).not.toBeNull();
  expect(spectra.flux.buffer).toBe(fresh.memory!.memory.buffer);
  expect([shift, oneOff]).toEqual([plain.shift, plain.oneOff]);
  expect(background!.coefficients).toEqual(plain.background!.coefficients);
  expect(spectra).toEqual(plain.spectra);
});

it("lends the room again after names that do not fit", async () => {
  const given = await inMemory();
  const { nTerm, legendre } = { nTerm: tramlines.degree + 1, legendre: tramlines.legendre.slice() };
  for (let k = 0; k + 1 < tramlines.nFibre; k++) {
    legendre.copyWithin(k * nTerm, (k + 1) * nTerm, (k + 2) * nTerm);
  }
  const refused = extractFrame(given, { ...tramlines, legendre });
  await expect(refused).rejects.toThrow(TraceError);
  await expect(refused).rejects.toThrow(
    /^scene\.fits: the light would fit better with every fibre one position \w+ than/,
  );
  const { spectra } = await extractFrame(given, tramlines);
  expect(spectra.flux.buffer).toBe(given.memory!.memory.buffer);
});

it("keeps the spectra of an earlier extraction when the frame is extracted again", async () => {
  const given = await inMemory();
  const first = await extractFrame(given, tramlines, { shift: false });
  const kept = first.spectra.flux.slice();
  const second = await extractFrame(given, tramlines, { shift: false, method: "boxcar" });
  expect(second.spectra.flux.buffer).not.toBe(first.spectra.flux.buffer);
  expect(second.spectra.flux).not.toEqual(kept);
  expect(first.spectra.flux).toEqual(kept);
});
