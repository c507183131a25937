/** A mean of faint light with model variances as weights is not drawn low; with each sample's own it is. */
import { describe, expect, it } from "vitest";
import { fixedVariance, modelVariance } from "../../src/calibration/sampleVariance.js";
import { benchSolution, benchSpectra, wavelengthImage } from "./fibreBench.js";

const shape = { nFibre: 2, nx: 4000 };
const wavelengths = wavelengthImage(benchSolution(shape));
const spectra = benchSpectra(shape, wavelengths, new Float64Array(8000).fill(1), () => 40, { fixed: 30 });

describe("variance of samples", () => {
  it("finds what is not the light's own, and does not hang on the single count", () => {
    const noise = fixedVariance(spectra, 1);
    const variances = Array.from({ length: 4000 }, (_, x) => modelVariance(noise, x, 40));
    expect(Math.min(...variances)).toBeGreaterThan(65);
    expect(Math.max(...variances)).toBeLessThan(75);
    const mean = (variance: (x: number) => number) => {
      let [sum, weight] = [0, 0];
      for (let x = 0; x < 4000; x++) {
        sum += spectra.flux[4000 + x] / variance(x);
        weight += 1 / variance(x);
      }
      return sum / weight;
    };
    const error = Math.sqrt(70 / 4000);
    expect(Math.abs(mean((x) => variances[x]) - 40)).toBeLessThan(3 * error);
    expect(mean((x) => spectra.variance[4000 + x]) - 40).toBeLessThan(-5 * error);
  });

  it("takes what FLUX_VAR says where pixels are lost, and nothing where a point is not to be used", () => {
    const spoilt = { ...spectra, variance: spectra.variance.slice(), flags: spectra.flags.slice() };
    spoilt.variance[70] = 400;
    spoilt.flags[90] = 512;
    const noise = fixedVariance(spoilt, 0);
    expect(modelVariance(noise, 70, 40)).toBe(400);
    expect(modelVariance(noise, 71, 40)).toBeCloseTo(70, 0);
    expect(modelVariance(noise, 90, 40)).toBeNaN();
  });
});
