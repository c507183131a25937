import { describe, expect, it } from "vitest";
import { gaussianWeights } from "../src/reference/profile.js";
import { type ColumnNoise, pixelVariance } from "../src/reference/variance.js";
import { columnsInput } from "./columns.js";
import { runBoth } from "./runs.js";

function noiseOf(fixed: number, inverseResponse: number, responseRelativeVariance: number): ColumnNoise {
  return {
    fixed: Float64Array.of(7, fixed),
    inverseResponse: Float64Array.of(3, inverseResponse),
    responseRelativeVariance: Float64Array.of(0.5, responseRelativeVariance),
  };
}

/** Howell, Handbook of CCD Astronomy, worked example of the CCD equation (from memory): a star of 24 013 ADU at
 * 5 e⁻/ADU on one pixel, sky 620 ADU a pixel, dark 1.8 e⁻, read noise 5 e⁻: S/N 342. */
const howell = { star: 24013 * 5, sky: 620 * 5, dark: 1.8, readNoise: 5 };

/** One fibre that is far narrower than a pixel, so that all of its light falls on one. */
function onePixel(star: number, sky: number, fixed: number) {
  const input = columnsInput({ nx: 3, ny: 19, centres: [9], sigmas: [0.02], flux: () => star, variance: () => fixed });
  input.electrons.forEach((light, i) => {
    input.electrons[i] = light + sky;
  });
  const noise = { ...input.noise, inverseResponse: new Float32Array(3 * 19).fill(1) };
  return { ...input, noise, background: { nX: 1, nY: 1, coefficients: Float64Array.of(sky) } };
}

describe("variance of a pixel", () => {
  it("is read noise², photons and dark in the handbook's worked example: S/N 342", () => {
    const { star, sky, dark, readNoise } = howell;
    const noise = noiseOf(readNoise ** 2 + dark, 1, 0);
    expect(Math.round(star / Math.sqrt(pixelVariance(noise, 1, star + sky)))).toBe(342);
  });

  it.each(["joint", "optimal", "boxcar"] as const)("gives that S/N to a whole extraction by %s", (method) => {
    const { star, sky, dark, readNoise } = howell;
    for (const [name, { flux, variance }] of runBoth({
      ...onePixel(star, sky, readNoise ** 2 + dark),
      method,
      halfAperture: 0.5,
    })) {
      expect(flux[1] / star, name).toBeCloseTo(1, 6);
      expect(Math.round(flux[1] / Math.sqrt(variance[1])), name).toBe(342);
    }
  });

  it("divides photon noise by the response once, and adds the response's own error squared", () => {
    // e = N/r: var(e) = var(N)/r² with N ~ Poisson(r·m) is m/r; the relative error of r moves e by σ_r/r · m.
    const [r, sigmaR, m] = [0.8, 0.004, 900];
    const v = pixelVariance(noiseOf(11, 1 / r, (sigmaR / r) ** 2), 1, m);
    expect(Math.abs(v - (11 + m / r + ((sigmaR * m) / r) ** 2))).toBeLessThan(1e-12 * v);
  });

  it("takes no photon noise from a negative model, but keeps the response's", () => {
    expect(pixelVariance(noiseOf(11, 1.25, 1e-4), 1, -30)).toBeCloseTo(11 + 1e-4 * 900, 12);
  });

  it("comes into the flux's variance with every term, in kernel and reference", () => {
    const [ny, sigma, level, flux] = [31, 1.3, 40, 5000];
    const noise = { fixed: 21, inverse: 1.125, flat: 2 ** -12 };
    const input = columnsInput({
      ny,
      centres: [15.3],
      sigmas: [sigma],
      flux: () => flux,
      variance: () => noise.fixed,
      extra: () => level,
    });
    const n = input.nx * ny;
    const changed = {
      ...input,
      background: { nX: 1, nY: 1, coefficients: Float64Array.of(level) },
      noise: {
        ...input.noise,
        inverseResponse: new Float32Array(n).fill(noise.inverse),
        responseRelativeVariance: new Float32Array(n).fill(noise.flat),
      },
    };
    const information = gaussianWeights(15.3, sigma, 7, 17).reduce((sum, p) => {
      const light = flux * p + level;
      return sum + (p * p) / (noise.fixed + light * noise.inverse + noise.flat * light * light);
    }, 0);
    for (const [name, { variance }] of runBoth(changed)) {
      // f32 pixels round the data, and the variances that follow, in the seventh digit.
      for (let x = 0; x < input.nx; x++) expect(Math.abs(variance[x] * information - 1), name).toBeLessThan(3e-7);
    }
  });
});
