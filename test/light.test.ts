/** Far wings beside the window, taken off as the fluxes tell them: on frames without noise the truth comes back, as it does from
 * windows wide enough to hold the wings. Invented data. */
import { describe, expect, it } from "vitest";
import { MaskBit } from "../src/reference/bits.js";
import type { ExtractionInput } from "../src/reference/extract.js";
import { gaussianWeights } from "../src/reference/profile.js";
import { runBoth, runKernel, runReference } from "./runs.js";
import { makeScene, type Scene } from "./scene.js";

/** Straight fibres of 1e5 and 10 e⁻ side by side, 1e-3 of whose light lies beyond the windows; no noise. */
function contrasts(nx = 8): Scene {
  const scene = makeScene({ nx, nFibre: 16, bow: 0, flux: (k) => (k % 3 === 1 ? 1e5 : 10) }, false);
  const { input } = scene;
  // Lines along the rows and widths that do not change: the line through two nodes is then exact.
  for (let k = 0; k < input.nFibre; k++) {
    input.trace.fill(0, 4 * k + 1, 4 * k + 4);
    input.width[2 * k + 1] = 0;
  }
  const exact = makeFrame(scene);
  return { ...scene, input: { ...exact, halfWindow: 3, wing: 8, bandwidth: 2 } };
}

/** Light of the input's own tramlines, from windows that hold all of it. */
function makeFrame({ input, flux, options }: Scene): ExtractionInput {
  const electrons = new Float32Array(input.nx * input.ny).fill(options.background);
  for (let k = 0; k < input.nFibre; k++) {
    const weights = gaussianWeights(input.trace[4 * k], input.width[2 * k], 0, input.ny);
    for (let at = 0; at < electrons.length; at++) {
      electrons[at] += flux[k * input.nx + (at % input.nx)] * weights[Math.floor(at / input.nx)];
    }
  }
  return { ...input, electrons };
}

function worstOff(found: ArrayLike<number>, truth: ArrayLike<number>): number {
  return Array.from(found).reduce((worst, flux, i) => {
    const off = Math.abs(flux - truth[i]);
    return Number.isNaN(off) ? Number.POSITIVE_INFINITY : Math.max(worst, off);
  }, 0);
}

describe("wings beside the windows", () => {
  it("give the fluxes of one wide fit, and the truth, to 1e-6 of the neighbours' light", () => {
    const { input, flux } = contrasts();
    const wide = runReference({ ...input, halfWindow: 11, wing: 0, bandwidth: 5 });
    for (const [name, result] of runBoth(input)) {
      expect(worstOff(result.flux, wide.flux), name).toBeLessThan(0.1);
      expect(worstOff(result.flux, flux), name).toBeLessThan(0.1);
    }
    // Without them faint fibres would be off by far more: the test has something to see.
    expect(worstOff(runKernel({ ...input, wing: 0 }).flux, flux)).toBeGreaterThan(10);
  });

  it("are the same in kernel and reference, with lines that bow", () => {
    const { input } = makeScene({ calibrationImages: true });
    const winged = { ...input, halfWindow: 4, wing: 8, kappa: 5, growKappa: 2.5 };
    const reference = runReference(winged);
    for (const [precision, bound] of [
      ["f64", 1e-10],
      ["f32", 1e-3],
    ] as const) {
      const kernel = runKernel(winged, precision);
      const off = Array.from(kernel.flux, (flux, i) => {
        if (Number.isNaN(reference.flux[i])) return 0;
        return Math.abs(flux - reference.flux[i]) / Math.sqrt(reference.variance[i]);
      });
      expect(Math.max(...off), precision).toBeLessThan(bound);
    }
  });

  it("move with a flux that a late rejection moves", () => {
    const { input, flux } = contrasts();
    // Two rows of a bright fibre, a round each; its core stays.
    const y = Math.round(input.trace[4 * 7]);
    for (let j = 0; j < 2; j++) input.electrons[(y + 1 + j) * input.nx + 3] += 9e5 * 3 ** -j;
    const hit = { ...input, kappa: 5, growKappa: 2.5, minRounds: 2, maxRounds: 12 };
    for (const [name, result] of runBoth(hit)) {
      expect(result.rejected.filter((bits) => bits & MaskBit.cosmic).length, name).toBe(2);
      for (let k = 0; k < input.nFibre; k++) {
        const at = k * input.nx + 3;
        const off = Math.abs(result.flux[at] - flux[at]) / Math.sqrt(result.variance[at]);
        expect(off, `${name}, fibre ${k}`).toBeLessThan(0.1);
      }
    }
  });
});
