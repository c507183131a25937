/** The injected light's level and noise. */
import { describe, expect, it } from "vitest";
import { planExtraction } from "../../../src/extraction/plan.js";
import { injectLight, makePatterns } from "../../../src/extraction/recover/inject.js";
import { planZones } from "../../../src/extraction/recover/zones.js";
import { poisson } from "../../../src/random/poisson.js";
import { openStream } from "../../../src/random/streams.js";
import { CLEAN, correctedFrame, exposureOf } from "../benchScene.js";
import { tramlinesFromTruth } from "../fromTruth.js";

const science = exposureOf(CLEAN, "sci_01");
const frame = correctedFrame(science);
const lines = tramlinesFromTruth(science);
const zones = planZones(lines, planExtraction(lines).active);
const n = frame.nx * frame.ny;

describe("makePatterns", () => {
  it("keeps within half of the flat's light, and leaves out what it cannot reach", () => {
    const { patterns, left } = makePatterns(2000, 300);
    expect(patterns.map(({ from, to }) => [from, to])).toEqual([
      [10, 100],
      [100, 1000],
    ]);
    expect(patterns[1].continuum * 2000).toBeCloseTo(10 ** 2.5, 9);
    expect(left).toHaveLength(2);
    expect(left[0]).toMatch(
      /^Nothing is injected at 1000 to 10000 e⁻ per column: the flat holds 2000 e⁻ per column, of which at most half/,
    );
  });

  it("draws lines of 2.2 px FWHM twenty times over the continuum", () => {
    const [, , pattern] = makePatterns(60_000, 300).patterns;
    for (const x of pattern.peaks) {
      expect(pattern.line[x]).toBeCloseTo(Math.min(20 * pattern.continuum, 0.95 - pattern.continuum), 12);
      // Σ over the line ÷ peak of a Gaussian of 2.2 px FWHM on pixels: between √(2π)·0.934 = 2.342 (centred on an edge: 2.49).
      const sum = pattern.line.subarray(x - 5, x + 6).reduce((total, one) => total + one, 0) / pattern.line[x];
      expect(sum).toBeGreaterThan(2.42);
      expect(sum).toBeLessThan(2.85);
    }
  });
});

describe("injectLight", () => {
  // A flat of known mean and Poisson noise, response 0.8, so that corrected pixels scatter by √(mean / 0.8).
  const [mean, response] = [180, 0.8];
  const noisy = { ...frame.noise, inverseResponse: new Float32Array(n).fill(1 / response) };
  const stream = openStream(5, "flat");
  const pixels = Float32Array.from({ length: n }, () => poisson(stream, mean * response) / response);
  const light = {
    pixels,
    noiseLeft: null,
    nUsed: new Uint8Array(n).fill(1),
    level: new Float64Array(zones.gaps.length * frame.nx),
  };
  const dark = { ...frame, electrons: new Float32Array(n), noise: noisy };

  it.each([0.003, 0.2, 0.5])("adds the share %d of the flat with the noise of so little light", (continuum) => {
    const pattern = { from: 10, to: 100, continuum, line: new Float64Array(frame.nx), peaks: [] };
    const { electrons } = injectLight(dark, light, pattern, zones, 3);
    const level = electrons.reduce((sum, one) => sum + one, 0) / n;
    const variance = electrons.reduce((sum, one) => sum + (one - continuum * mean) ** 2, 0) / n;
    const wanted = (continuum * mean) / response;
    // Four standard errors of a mean, and of a variance whose fourth moment Poisson noise raises by 1 / wanted at most.
    expect(Math.abs(level - continuum * mean)).toBeLessThan(4 * Math.sqrt(wanted / n));
    expect(Math.abs(variance / wanted - 1)).toBeLessThan(4 * Math.sqrt((2 + 2 / wanted) / n));
  });

  it("keeps the smooth light of the gaps out of lines", () => {
    const line = new Float64Array(frame.nx);
    line[70] = 0.4;
    const level = new Float64Array(zones.gaps.length * frame.nx).fill(mean);
    const pattern = { from: 10, to: 100, continuum: 0, line, peaks: [70] };
    const { electrons } = injectLight(dark, { ...light, level }, pattern, zones, 3);
    let [sum, beside] = [0, 0];
    for (let y = 0; y < frame.ny; y++) {
      sum += electrons[y * frame.nx + 70];
      beside += Math.abs(electrons[y * frame.nx + 71]);
    }
    expect(Math.abs(sum / frame.ny)).toBeLessThan(4 * Math.sqrt((0.4 * mean) / response / frame.ny));
    expect(beside).toBe(0);
  });
});
