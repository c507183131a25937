import { describe, expect, it } from "vitest";
import { MaskBit } from "../src/reference/bits.js";
import type { ExtractionOutput, Method } from "../src/reference/extract.js";
import { runKernel, runReference } from "./runs.js";
import { makeScene, type Scene } from "./scene.js";

const methods: [Method, boolean][] = [
  ["joint", false],
  ["optimal", false],
  ["optimal", true],
  ["boxcar", false],
  ["boxcar", true],
];

/** A scene with everything that can go wrong on a detector. */
function roughScene(): Scene {
  const scene = makeScene({ calibrationImages: true });
  const { input } = scene;
  for (let y = 0; y < input.ny; y++) input.mask[y * input.nx + 20] = MaskBit.bad;
  for (let y = 30; y < 34; y++) input.mask[y * input.nx + 33] = MaskBit.saturated;
  input.electrons[50 * input.nx + 41] = Number.NaN;
  input.mask[50 * input.nx + 41] = MaskBit.missing;
  for (let i = 0; i < 12; i++) input.electrons[(5 + 7 * i) * input.nx + 3 + 5 * i - (i > 10 ? 20 : 0)] += 900 + 400 * i;
  return { ...scene, input: { ...input, kappa: 5, growKappa: 2.5 } };
}

function worstDifference(a: ExtractionOutput, b: ExtractionOutput): number {
  let worst = 0;
  for (let i = 0; i < a.flux.length; i++) {
    const sigma = Math.sqrt(b.variance[i]);
    if (Number.isNaN(b.flux[i])) {
      expect(a.flux[i]).toBeNaN();
      continue;
    }
    worst = Math.max(worst, Math.abs(a.flux[i] - b.flux[i]) / (Math.abs(b.flux[i]) + sigma));
  }
  return worst;
}

describe("extraction kernel", () => {
  it.each(methods)("agrees with the reference in f64: %s, cross-talk correction %s", (method, crosstalk) => {
    const input = { ...roughScene().input, method, crosstalk };
    const [kernel, reference] = [runKernel(input, "f64"), runReference(input)];
    expect(worstDifference(kernel, reference)).toBeLessThan(1e-10);
    expect(kernel.flags).toEqual(reference.flags);
    expect(kernel.rejected).toEqual(reference.rejected);
    for (const image of ["variance", "neighbourCovariance", "chi2", "background"] as const) {
      for (let i = 0; i < kernel.flux.length; i++) {
        const [found, expected] = [kernel[image][i], reference[image][i]];
        if (Number.isNaN(expected)) expect(found).toBeNaN();
        else expect(Math.abs(found - expected)).toBeLessThanOrEqual(1e-9 * (Math.abs(expected) + 1e-3));
      }
    }
  });
});
