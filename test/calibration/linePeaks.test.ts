/** Peaks of known lines: all of them, where they are, and none of noise. */
import { describe, expect, it } from "vitest";
import { lineSpectrum } from "../../src/calibration/lineCentres.js";
import { findLinePeaks, roughFwhm } from "../../src/calibration/linePeaks.js";
import { normalCumulative } from "../../src/simulate/gaussian.js";
import { makeSpectra, saturate } from "./lineSpectra.js";

const brightness = [600, 2e5, 1500, 4000, 5e4, 1e4, 9e4];
const lines = brightness.map((electrons, i) => ({ x: 12.3 + 26.1 * i, electrons }));
const usualFwhm = 2.2;

/** Mean light of the three pixels about a line's middle, which peaks are looked for in at this width. */
const topOf = (x: number, electrons: number, sigma: number) => {
  const at = Math.round(x) - x;
  return (electrons * (normalCumulative((at + 1.5) / sigma) - normalCumulative((at - 1.5) / sigma))) / 3;
};

describe("peaks of a spectrum", () => {
  it("are its lines, from 600 to 200 000 e⁻, with their heights above a sloping continuum", () => {
    const spectrum = lineSpectrum(makeSpectra([lines], { noise: 0 }), 0);
    const peaks = findLinePeaks(spectrum, usualFwhm);
    expect(peaks.map(({ top }) => top)).toEqual(lines.map(({ x }) => Math.round(x)));
    peaks.forEach(({ height, saturated }, i) => {
      // The level is known to the slope's change over half a block of 40 columns, 1 e⁻.
      expect(Math.abs(height - topOf(lines[i].x, brightness[i], 0.93))).toBeLessThan(1.5);
      expect(saturated).toBe(false);
    });
  });

  it("are none in noise, on a faint continuum or on a bright one that rises", () => {
    for (const continuum of [5, 1e5]) {
      const spectra = makeSpectra(
        Array.from({ length: 60 }, () => []),
        { continuum },
      );
      for (let k = 0; k < 60; k++) expect(findLinePeaks(lineSpectrum(spectra, k), usualFwhm)).toEqual([]);
    }
  });

  it("stand out in all their columns together: 8 σ of three", () => {
    const raised = (sigmas: number) => {
      const spectra = makeSpectra([[]], { noise: 0 });
      for (const x of [89, 90, 91]) spectra.flux[x] += sigmas * Math.sqrt(spectra.variance[x]);
      return findLinePeaks(lineSpectrum(spectra, 0), usualFwhm);
    };
    expect(raised(4.45)).toEqual([]);
    expect(raised(4.8)).toHaveLength(1);
  });

  it("are not the noise on the top of something broad and bright", () => {
    for (const seed of [1, 2, 3, 4]) {
      const hump = lineSpectrum(makeSpectra([[{ x: 100, electrons: 2e6 }]], { sigma: 14, seed }), 0);
      expect(findLinePeaks(hump, usualFwhm).length).toBeLessThanOrEqual(1);
    }
  });

  it("of broad lines are one each, whatever the noise on their tops", () => {
    const broad = [40, 105, 163].map((x) => ({ x, electrons: 2e4 }));
    for (const seed of [1, 2, 3, 4, 5, 6]) {
      const spectrum = lineSpectrum(makeSpectra([broad], { sigma: 5, continuum: 900, seed }), 0);
      const tops = findLinePeaks(spectrum, 11.8).map(({ top }) => top);
      expect(tops).toHaveLength(3);
      tops.forEach((top, i) => {
        expect(Math.abs(top - broad[i].x)).toBeLessThanOrEqual(3);
      });
    }
  });

  it("know a saturated line by its flags, with what lies on its flanks, and by its flat top", () => {
    const beside = [...lines, { x: lines[1].x + 4.6, electrons: 2e4 }];
    const flagged = makeSpectra([beside], { noise: 0 });
    saturate(flagged, 5.5e4, true);
    const peaks = findLinePeaks(lineSpectrum(flagged, 0), usualFwhm);
    const run = peaks.filter(({ top }) => Math.abs(top - lines[1].x) < 8);
    expect(run.map(({ top }) => top)).toEqual([43]);
    expect(run.every(({ saturated }) => saturated)).toBe(true);
    expect(peaks.filter(({ top }) => Math.abs(top - lines[1].x) >= 8).some(({ saturated }) => saturated)).toBe(false);
    const flat = makeSpectra([[{ x: 60.2, electrons: 9e5 }, ...lines.slice(3)]], { noise: 0 });
    saturate(flat, 5.5e4, false);
    const cut = findLinePeaks(lineSpectrum(flat, 0), usualFwhm);
    expect(cut.map(({ saturated }) => saturated)).toEqual([true, false, false, false, false]);
  });

  it("say the lines' width, and NaN when there are none", () => {
    for (const sigma of [0.93, 1.6, 3]) {
      // As seen, pixels included. The height is a mean of three columns, so that the sharpest come out a seventh too narrow.
      const seen = 2.35482 * Math.sqrt(sigma ** 2 + 1 / 12);
      const ratio = roughFwhm([lineSpectrum(makeSpectra([lines], { sigma }), 0)]) / seen;
      expect(ratio, `${sigma}`).toBeGreaterThan(sigma < 1 ? 0.84 : 0.9);
      expect(ratio, `${sigma}`).toBeLessThan(1.03);
    }
    expect(roughFwhm([lineSpectrum(makeSpectra([[]]), 0)])).toBeNaN();
  });
});
