import { describe, expect, it } from "vitest";
import { noBackground } from "../../src/extraction/background.js";
import { extractFrame } from "../../src/extraction/extract.js";
import { loadKernels } from "../../src/kernels/module.js";
import { TraceError } from "../../src/tramlines/errors.js";
import { compareOneOff } from "../../src/tramlines/oneOff.js";
import type { Tramlines } from "../../src/tramlines/tramlines.js";
import { frameFromTruth, tramlinesFromTruth } from "../extraction/fromTruth.js";
import { bench, nFibre, readNoise } from "../extraction/twoBlocks.js";

const options = { refine: false, cosmicRays: false } as const;
const exposure = bench("science");

/** The frame, and tramlines that stand `pitches` higher, as of a flat taken before everything moved down. */
function moved(pitches: number) {
  const truth = tramlinesFromTruth(exposure);
  const tramlines = { ...truth, state: [...truth.state], legendre: truth.legendre.slice() };
  const nTrace = tramlines.degree + 1;
  for (let k = 0; k < nFibre; k++) tramlines.legendre[k * nTrace] += 5 * pitches;
  return { frame: frameFromTruth(exposure, readNoise), tramlines };
}

describe("a science frame one fibre off the flat", () => {
  it("is read where it is named when nothing moved, both other readings far behind", async () => {
    const { frame, tramlines } = moved(0);
    const { oneOff, shift } = await extractFrame(frame, tramlines, options);
    expect(Math.abs(shift!.coefficients[0])).toBeLessThan(0.02);
    expect(oneOff!.lower).toBeGreaterThan(50);
    expect(oneOff!.higher).toBeGreaterThan(50);
  });

  it("is not judged by two fibres, which have no pattern", async () => {
    const { frame, tramlines } = moved(0);
    const two: Tramlines = { ...tramlines, state: tramlines.state.map((_, k) => (k < 2 ? "lit" : "dead")) };
    expect(compareOneOff(await loadKernels(), frame, two, noBackground())).toBeNull();
  });

  it.each([
    [1, "lower"],
    [-1, "higher"],
  ])(
    "is refused when the flat's lines stand %i pitch off, and the message names the remedies",
    async (pitches, which) => {
      const { frame, tramlines } = moved(pitches);
      const run = extractFrame(frame, tramlines, options);
      await expect(run).rejects.toThrow(TraceError);
      await expect(run).rejects.toThrow(
        new RegExp(
          `^one: the light would fit (better|as well) with every fibre one position ${which} than where it is named .*` +
            "; trace a flat taken next to it, or trust the names \\(--trust-names; checkNames: false\\) if you know that nothing moved by a fibre\\.$",
        ),
      );
    },
  );

  it("is extracted under wrong numbers when the names are trusted: what the option costs", async () => {
    const { frame, tramlines } = moved(1);
    tramlines.state[3] = "lit"; // Or the light in a dead fibre would tell.
    const { spectra, oneOff } = await extractFrame(frame, tramlines, { ...options, checkNames: false });
    expect(Math.min(oneOff!.lower, oneOff!.higher)).toBeLessThan(50);
    // Fibre 8's light, in the truth's row 7, comes out in row 6.
    const { flux } = exposure.truth;
    let [own, next] = [0, 0];
    for (let x = 0; x < 320; x++) {
      own += Math.abs(spectra.flux[6 * 320 + x] - flux[6 * 320 + x]);
      next += Math.abs(spectra.flux[6 * 320 + x] - flux[7 * 320 + x]);
    }
    expect(next).toBeLessThan(0.1 * own);
  });

  it("is not checked with too little light, and the warning says so", async () => {
    const { frame, tramlines } = moved(1);
    frame.electrons.fill(0);
    const { warnings, oneOff } = await extractFrame(frame, tramlines, options);
    expect(oneOff).toBeNull();
    expect(warnings[0]).toBe(
      "one: too little light to measure its shift against the flat, so none is applied; spectra are right only if nothing " +
        "moved since the flat, and by a whole fibre neither, since names are not checked then.",
    );
  });
});
