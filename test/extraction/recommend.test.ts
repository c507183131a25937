import { describe, expect, it } from "vitest";
import { compareMethods } from "../../src/extraction/compare.js";
import { recommendation } from "../../src/extraction/recommend.js";
import { frameScene } from "./frames.js";

const bare = { cosmicRays: false, background: false, shift: false, refine: false } as const;

describe("agreement of the methods", () => {
  const levels = [80, 500, 4000, 30_000, 200, 9000];
  const flux = (k: number, x: number) => levels[k % 6] * (1 + 0.2 * Math.sin(x / 40 + k));
  const scene = () => frameScene({ nx: 300, ny: 118, nFibre: 24, pitch: 4.6, background: 0, readNoise: 9, flux });

  it("is noise alone with the true profile: differences scatter by 1 σ of the difference about 0", async () => {
    const { frame, tramlines } = scene();
    const { agreement, methods } = await compareMethods(frame, tramlines, bare);
    const boxcar = agreement.find((one) => one.method === "boxcar" && one.crosstalkCorrected)!;
    expect(boxcar.levels.map(({ from }) => from)).toEqual([Number.NEGATIVE_INFINITY, 100, 1000, 10_000]);
    for (const { nPoint, median, spread } of boxcar.levels) {
      // Errors of a median, 1.25/√n, and of a robust scatter, 1.17/√n (Gaussian efficiencies 64 % and 37 %); 4 of them.
      expect(Math.abs(median)).toBeLessThan(5 / Math.sqrt(nPoint));
      expect(Math.abs(spread - 1)).toBeLessThan(4.7 / Math.sqrt(nPoint));
    }
    // Optimal, corrected, is joint by another way: C = D⁻¹M with the same M.
    expect(agreement.find((one) => one.method === "optimal" && one.crosstalkCorrected)!.levels).toEqual([]);
    // What the spectra's own scatter shows of the gain is what is promised and expected.
    const joint = methods[0];
    expect(joint.promisedExposure).toBeGreaterThan(1.05);
    expect(Math.abs(joint.seenExposure / joint.promisedExposure - 1)).toBeLessThan(0.06);
    for (const { equivalentExposure, expectedExposure } of methods) {
      expect(Math.abs(equivalentExposure / expectedExposure - 1)).toBeLessThan(0.01);
    }
  });

  it("is lost with a profile 12 % too narrow", async () => {
    const { frame, tramlines } = scene();
    tramlines.profile.sigma.forEach((_, i) => {
      tramlines.profile.sigma[i] *= 0.88;
    });
    const { agreement } = await compareMethods(frame, tramlines, bare);
    const boxcar = agreement.find((one) => one.method === "boxcar" && one.crosstalkCorrected)!;
    expect(Math.abs(boxcar.levels.at(-1)!.median)).toBeGreaterThan(3);
  });
});

describe("the method for each fibre", () => {
  it("follows leak, gain and misfit, and names the neighbour", async () => {
    // By slit position: 1 faint alone, 2 bright alone, 3 faint beside 4 bright, 5 broad and bright alone.
    const rows = [15, 45, 75, 80, 115];
    const lights = [150, 60_000, 300, 50_000, 40_000];
    const widths = [1.1, 1.1, 1.1, 1.1, 1.6];
    const make = (k: number, sigma: number) =>
      frameScene({
        nx: 160,
        ny: 135,
        nFibre: 5,
        pitch: 5,
        sigma,
        bow: 0,
        background: 0,
        readNoise: 0.1,
        seed: k,
        flux: () => 0,
      });
    const { frame, tramlines } = make(3, 1.1);
    rows.forEach((y, k) => {
      tramlines.legendre.set([y, 0, 0, 0], 4 * k);
      tramlines.profile.sigma.set([1.1, 0], 2 * k);
    });
    addLight(frame.electrons, frame.nx, rows, lights, widths);
    frame.noise.fixedVariance.fill(25);
    const { fibres } = await compareMethods(frame, tramlines, { ...bare, halfAperture: 2.5 });
    expect(fibres.map(({ fibre, method }) => [fibre, method])).toEqual([
      [1, "optimal"],
      [2, "boxcar"],
      [3, "joint"],
      [4, "boxcar"],
      [5, "boxcar"],
    ]);
    // Σ s²v / c² · Σ P²/v with v = 25 + 150 P e⁻², five whole pixels and c the light that they catch.
    const pixels = [-4, -3, -2, -1, 0, 1, 2, 3, 4].map((y) => integral(y, 1.1) / (1.1 * Math.sqrt(2 * Math.PI)));
    const caught = pixels.slice(2, 7).reduce((sum, p) => sum + p, 0);
    const information = pixels.reduce((sum, p) => sum + (p * p) / (25 + 150 * p), 0);
    const gain = ((5 * 25 + 150 * caught) / (caught * caught)) * information;
    expect(Math.abs(fibres[0].gain / gain - 1)).toBeLessThan(0.005);
    expect(fibres[0].reason).toBe(`weighted gains ${fibres[0].gain.toFixed(2)} x exposure`);
    expect(fibres[1].reason).toMatch(/^weighted gains only 1\.0[0-4] x exposure$/);
    // From 2.5 to 7.5 px off a Gaussian of 1.1 px lie 1.152 % of the light, over 97.697 % caught (scipy's erf).
    expect(fibres[2].from).toBe(4);
    expect(Math.abs(fibres[2].fromShare / (0.01152 / 0.97697) - 1)).toBeLessThan(0.002);
    expect(fibres[2].reason).toMatch(
      /^boxcar would take 1\.2 % of its neighbour 4 \(all neighbours: 2\.0 x its own light\)$/,
    );
    expect(fibres[4].reason).toMatch(/^profile misfits: chi2 \d+(\.\d)?$/);
    expect(recommendation(fibres)).toEqual({
      method: "joint",
      reason: "since neighbours' light would count in 1 of 5 fibres",
    });
  });
});

/** Expected light of Gaussians on whole rows, with a ripple of its noise: ± √(light) in turns, so that χ² is that of noise. */
function addLight(electrons: Float32Array, nx: number, rows: number[], lights: number[], widths: number[]): void {
  const ny = electrons.length / nx;
  for (let y = 0; y < ny; y++) {
    const light = rows.reduce(
      (sum, row, k) => sum + (lights[k] / (widths[k] * Math.sqrt(2 * Math.PI))) * integral(y - row, widths[k]),
      0,
    );
    for (let x = 0; x < nx; x++)
      electrons[y * nx + x] = light + Math.sqrt(light + 25) * ((x + 3 * y) % 2 === 0 ? 1 : -1);
  }
}

/** ∫ exp(−u²/2σ²) du over the pixel, midpoints of 50 pieces. */
function integral(offset: number, sigma: number): number {
  let sum = 0;
  for (let i = 0; i < 50; i++) sum += Math.exp(-0.5 * ((offset - 0.49 + i / 50) / sigma) ** 2) / 50;
  return sum;
}
