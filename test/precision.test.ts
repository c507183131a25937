/** What single precision costs: in blends, and with 1e5 e⁻ beside 10. Measured against the reference in double precision. */
import { describe, expect, it } from "vitest";
import type { Method } from "../src/reference/extract.js";
import { runKernel, runReference } from "./runs.js";
import { makeScene } from "./scene.js";

const sigma = 2.4 / (2 * Math.sqrt(2 * Math.log(2)));
const methods: [Method, boolean][] = [
  ["joint", false],
  ["optimal", true],
  ["boxcar", true],
];

/** Largest |Δflux|/σ and |Δvariance|/variance of f32 against the reference. */
function cost(pitch: number, bright: number, faint: number, method: Method, crosstalk: boolean) {
  const flux = (k: number, x: number) => (k % 2 ? faint : bright) * (1 + 0.001 * x);
  const scene = makeScene({
    pitch,
    sigma,
    nx: 66, // the last group of four lanes holds two columns
    nFibre: 20,
    ny: 30 + Math.ceil(20 * pitch),
    flux,
  });
  const input = {
    ...scene.input,
    method,
    crosstalk,
    bandwidth: Math.min(19, Math.ceil(14 / pitch)),
    halfAperture: pitch / 2,
  };
  const [found, expected] = [runKernel(input, "f32"), runReference(input)];
  let [worst, worstVariance, n] = [0, 0, 0];
  expected.flux.forEach((flux, i) => {
    if (!(expected.variance[i] > 0)) return;
    n++;
    worst = Math.max(worst, Math.abs(found.flux[i] - flux) / Math.sqrt(expected.variance[i]));
    worstVariance = Math.max(worstVariance, Math.abs(found.variance[i] / expected.variance[i] - 1));
  });
  expect(n).toBe(expected.flux.length);
  return { worst, worstVariance };
}

describe("single precision", () => {
  describe.each([2, 2.5, 3, 4.9])("at pitch %d px, FWHM 2.4 px", (pitch) => {
    it.each(methods)("costs under 3e-4 σ beside fibres 1e4 times as bright: %s, corrected %s", (method, crosstalk) => {
      const { worst, worstVariance } = cost(pitch, 1e5, 10, method, crosstalk);
      expect(worst).toBeLessThan(3e-4);
      expect(worstVariance).toBeLessThan(5e-6);
    });

    it.each(methods)("costs under 1e-4 σ among equals: %s, corrected %s", (method, crosstalk) => {
      expect(cost(pitch, 2600, 900, method, crosstalk).worst).toBeLessThan(1e-4);
    });
  });

  it("loses digits where fibres are blended within one width: over ten times as many at 1.2 px as at 2.5 px", () => {
    const [near, apart] = [cost(1.2, 1e5, 10, "joint", false), cost(2.5, 1e5, 10, "joint", false)];
    expect(near.worstVariance / apart.worstVariance).toBeGreaterThan(10);
  });
});
