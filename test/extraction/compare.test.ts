import { describe, expect, it } from "vitest";
import { compareMethods } from "../../src/extraction/compare.js";
import { gaussianWeights } from "../../src/reference/profile.js";
import { frameScene } from "./frames.js";

const sigma = 2.5 / (2 * Math.sqrt(2 * Math.log(2)));
const bare = { cosmicRays: false, background: false } as const;

describe("comparison of the methods", () => {
  it("finds the equivalent exposure that theory gives where background rules", async () => {
    // Read noise of 30 e⁻ against some 50 e⁻ of light: v is the same on every pixel. Boxcar of ±h: v·Σ share²/C², weighted:
    // v/Σ P²; the ratio averaged over sub-pixel places of a lone fibre (closed form, from erf).
    const { frame, tramlines } = frameScene({
      nx: 200,
      ny: 260,
      nFibre: 12,
      pitch: 20.3,
      sigma,
      bow: 2.3,
      readNoise: 30,
      background: 0,
      flux: () => 50,
    });
    tramlines.profile.sigma.forEach((_, i) => {
      tramlines.profile.sigma[i] = i % 2 ? 0 : sigma;
    });
    const half = 2.2;
    const ratios: number[] = [];
    for (let centre = 10; centre < 11; centre += 0.01) {
      const weights = gaussianWeights(centre, sigma, 0, 21);
      let [caught, noise, information] = [0, 0, 0];
      weights.forEach((p, y) => {
        const share = Math.max(0, Math.min(y + 0.5, centre + half) - Math.max(y - 0.5, centre - half));
        caught += share * p;
        noise += share * share;
        information += p * p;
      });
      ratios.push((noise / (caught * caught)) * information);
    }
    const expected = ratios.reduce((sum, ratio) => sum + ratio, 0) / ratios.length;
    const { methods } = await compareMethods(frame, tramlines, { ...bare, halfAperture: half });
    for (const { method, equivalentExposure, equivalentExposureFaint } of methods) {
      const theory = method === "boxcar" ? 1 : expected;
      // Half a per cent of photon noise follows the light and is not in the theory.
      expect(Math.abs(equivalentExposure / theory - 1), method).toBeLessThan(0.01);
      expect(Math.abs(equivalentExposureFaint / theory - 1), method).toBeLessThan(0.01);
    }
    expect(expected).toBeGreaterThan(1.1); // weighting gains something here, or the comparison would say nothing
  });

  it("finds the light that an uncorrected boxcar leaks: 0.9266 %/98.147 % at FWHM 2.5 px, pitch 5 px (from erf)", async () => {
    // Every fourth fibre is bright: its neighbours have it on one side only. Lines on whole pixels, so that apertures end
    // on pixels' edges, as in the closed form; a boxcar counts the 98.147 % that it catches as the whole.
    const flux = (k: number) => (k % 4 === 1 ? 3e5 : 500 + 10 * k);
    const { frame, tramlines } = frameScene({ nx: 48, ny: 120, nFibre: 20, pitch: 5, flux });
    frame.electrons.fill(0);
    for (let k = 0; k < 20; k++) {
      tramlines.legendre.set([9 + 5 * k, 0, 0, 0], 4 * k);
      tramlines.profile.sigma.set([sigma, 0], 2 * k);
      const weights = gaussianWeights(9 + 5 * k, sigma, 0, 120);
      frame.electrons.forEach((_, i) => {
        frame.electrons[i] += flux(k) * weights[Math.floor(i / 48)];
      });
    }
    const { methods, nWitness, leaks } = await compareMethods(frame, tramlines, { ...bare, halfAperture: 2.5 });
    expect(nWitness).toBe(10 * 48);
    const leak = (method: string, corrected: boolean) =>
      methods.find((m) => m.method === method && m.crosstalkCorrected === corrected)!;
    // Two faint fibres in three have a bright one at one pitch; the third, at two pitches, is no witness. Other faint
    // neighbours leak too, at most 700/3e5 of the bright one's share.
    const theory = 0.009266 / 0.98147;
    expect(Math.abs(leak("boxcar", false).leakedShare / theory - 1)).toBeLessThan(0.003);
    expect(Math.abs(leak("boxcar", true).leakedShare)).toBeLessThan(1e-7);
    expect(leak("joint", true).leakedShare).toBe(0);
    expect(Math.abs(leak("optimal", true).leakedShare)).toBeLessThan(1e-11);
    expect(Math.abs(leak("boxcar", true).fluxRatio - 1)).toBeLessThan(1e-5);
    // Fibre by fibre, both sides of each of the five bright ones.
    const plain = leaks.filter((one) => one.method === "boxcar" && !one.crosstalkCorrected && one.bright % 4 === 2);
    expect(plain.map(({ bright, fibre }) => `${bright}>${fibre}`).sort()).toEqual(
      ["2>1", "2>3", "6>5", "6>7", "10>9", "10>11", "14>13", "14>15", "18>17", "18>19"].sort(),
    );
    for (const { share, error, model, modelOfAll } of plain) {
      expect(Math.abs(model / theory - 1)).toBeLessThan(1e-4);
      expect(Math.abs(share - modelOfAll)).toBeLessThan(1e-7);
      expect(error).toBeLessThan(1e-7); // No noise in this frame.
    }
  });
});
