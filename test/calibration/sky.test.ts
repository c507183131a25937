/** A sky of known light in fibres of known throughput and noise: what is left of it against that noise. */
import { describe, expect, it } from "vitest";
import { calibrateSpectra } from "../../src/calibration/calibrate.js";
import { fitSky } from "../../src/calibration/sky.js";
import {
  benchLine,
  benchSky,
  benchSolution,
  benchSpectra,
  benchThroughput,
  DIGEST,
  spreadAboutZero,
  wavelengthImage,
} from "./fibreBench.js";

const shape = { nFibre: 40, nx: 512, dead: [13] };
const skyFibres = [2, 7, 11, 16, 20, 24, 29, 33, 38];
const solution = benchSolution(shape);
const wavelengths = wavelengthImage(solution);
const truth = benchThroughput(shape);
const sky = benchSky();
const isSky = (k: number) => skyFibres.includes(k);
/** Targets from 3 to 3000 e⁻. */
const target = (wavelength: number, k: number) =>
  isSky(k)
    ? 0
    : 3 * 10 ** ((3 * k) / 40) * (1 + 3e-4 * (wavelength - 6600)) + (k === 21 ? benchLine(6500, 4000)(wavelength) : 0);
const relative = Float32Array.from(truth);
const throughput = {
  nFibre: 40,
  nx: 512,
  relative,
  variance: new Float32Array(relative.length),
  geometryDigest: DIGEST,
};
const night = (seed: number, more: (wavelength: number, k: number, x: number) => number = () => 0) =>
  benchSpectra(shape, wavelengths, truth, (l, k, x) => sky(l) + target(l, k) + more(l, k, x), { seed });

describe("the sky", () => {
  it("comes off with the right error bars, from targets and from sky fibres", () => {
    const pulls = { targets: [] as number[], skies: [] as number[], lines: [] as number[] };
    let [left, nLeft] = [0, 0];
    for (const seed of [1, 2, 3]) {
      const { spectra } = calibrateSpectra(night(seed), DIGEST, { solution, zeroPoint: null, throughput, skyFibres });
      for (let i = 0; i < wavelengths.length; i++) {
        const k = Math.floor(i / 512);
        if (Number.isNaN(spectra.flux[i])) continue;
        const pull = (spectra.flux[i] - target(wavelengths[i], k)) / Math.sqrt(spectra.variance[i]);
        (isSky(k) ? pulls.skies : pulls.targets).push(pull);
        if (sky(wavelengths[i]) > 300) pulls.lines.push(pull);
        if (sky(wavelengths[i]) < 135 && k !== 21) {
          left += spectra.flux[i] - target(wavelengths[i], k);
          nLeft++;
        }
      }
    }
    for (const kind of [pulls.targets, pulls.skies, pulls.lines]) {
      expect(spreadAboutZero(kind)).toBeGreaterThan(0.95);
      expect(spreadAboutZero(kind)).toBeLessThan(1.08);
    }
    expect(Math.abs(left / nLeft / 120)).toBeLessThan(0.003);
  });

  it("foretells each sky fibre from the others", () => {
    const { checks, leftOut, nClipped } = fitSky({ spectra: night(4), wavelengths, relative, skyFibres });
    expect(leftOut).toEqual([]);
    expect(nClipped).toBeLessThan(12);
    expect(checks.map(({ fibre }) => fibre)).toEqual(skyFibres);
    for (const check of checks) {
      expect(check.pullBetween).toBeGreaterThan(0.85);
      expect(check.pullBetween).toBeLessThan(1.15);
      expect(Math.abs(check.residual)).toBeLessThan(4 * check.error);
    }
  });

  it("names a sky fibre with an object, and is as if it were not there", () => {
    const withObject = night(5, (_, k) => (k === 16 ? 25 : 0));
    const found = fitSky({ spectra: withObject, wavelengths, relative, skyFibres });
    expect(found.leftOut.map(({ fibre }) => fibre)).toEqual([16]);
    expect(found.leftOut[0].residual).toBeCloseTo(25 / 120, 1);
    const without = fitSky({
      spectra: withObject,
      wavelengths,
      relative,
      skyFibres: skyFibres.filter((k) => k !== 16),
    });
    expect(found.values).toEqual(without.values);
    const { warnings } = calibrateSpectra(withObject, DIGEST, {
      solution,
      zeroPoint: null,
      throughput,
      skyFibres,
      name: "sci.fits",
    });
    expect(warnings.join()).toContain(
      "sci.fits: 1 of 9 sky fibres does not see the sky of the others and was left out: 17 (+",
    );
  });

  it("passes over an object's line and hits in sky fibres", () => {
    const clean = fitSky({ spectra: night(6), wavelengths, relative, skyFibres });
    const line = benchLine(6480, 1500);
    const spectra = night(6, (l, k) => (k === 20 ? line(l) : 0));
    spectra.flux[24 * 512 + 300] += 900;
    const found = fitSky({ spectra, wavelengths, relative, skyFibres });
    expect(found.leftOut).toEqual([]);
    const worst = Math.max(
      ...found.values
        .map((v, i) => Math.abs(v - clean.values[i]) / Math.sqrt(clean.variance[i]))
        .filter(Number.isFinite),
    );
    expect(worst).toBeLessThan(2.5);
    expect(found.ownShare[24 * 512 + 300]).toBe(0);
  });
});

describe("calibration", () => {
  it("divides flux, variance and covariance by the throughput, and adds the throughput's variance", () => {
    const raw = night(7);
    const uncertain = { ...throughput, variance: relative.map((t) => (0.01 * t) ** 2) };
    const { spectra } = calibrateSpectra(raw, DIGEST, { solution, zeroPoint: null, throughput: uncertain });
    const i = 5 * 512 + 100;
    const t = relative[i];
    expect(spectra.flux[i]).toBeCloseTo(raw.flux[i] / t, 3);
    expect(spectra.variance[i]).toBeCloseTo((raw.variance[i] + (0.01 * raw.flux[i]) ** 2) / t ** 2, 3);
    expect(spectra.neighbourCovariance[i]).toBeCloseTo(-3 / (t * relative[i + 512]), 5);
    expect(raw.flux[i]).toBe(night(7).flux[i]);
  });

  it("gives next neighbours the sky's error in common", () => {
    // Two fibres at the same wavelengths, with little noise of their own beside five noisy sky fibres.
    const products: number[] = [];
    let covariance = 0;
    for (let seed = 20; seed < 60; seed++) {
      const raw = night(seed);
      for (const k of [4, 5, 8, 9]) {
        for (let x = 0; x < 512; x++) raw.flux[k * 512 + x] = truth[k * 512 + x] * sky(wavelengths[k * 512 + x]);
      }
      const { spectra } = calibrateSpectra(raw, DIGEST, { solution, zeroPoint: null, throughput, skyFibres });
      for (const k of [4, 8]) {
        for (let i = k * 512 + 60; i < k * 512 + 450; i++) {
          if (sky(wavelengths[i]) > 125) continue;
          products.push(spectra.flux[i] * spectra.flux[i + 512]);
          covariance += spectra.neighbourCovariance[i] + 3 / (relative[i] * relative[i + 512]);
        }
      }
    }
    const mean = products.reduce((s, v) => s + v, 0) / products.length;
    expect(mean / (covariance / products.length)).toBeGreaterThan(0.85);
    expect(mean / (covariance / products.length)).toBeLessThan(1.2);
  });

  it("moves wavelengths by the zero point", () => {
    const zeroPoint = { pixels: 0.5, error: 0.01, nLine: 7, warnings: [] };
    const moved = calibrateSpectra(night(8), DIGEST, { solution, zeroPoint });
    expect(moved.wavelengths).toEqual(wavelengthImage(solution, 0.5));
    expect(moved.zeroPoint).toBe(zeroPoint);
  });

  it("flags what has no wavelength, and leaves no number there", () => {
    const { spectra } = calibrateSpectra(night(9), DIGEST, { solution, zeroPoint: null, throughput, skyFibres });
    expect(spectra.flags[13 * 512 + 9]).toBe(1024 | 4096);
    expect(spectra.flux[13 * 512 + 9]).toBeNaN();
    expect(spectra.variance[13 * 512 + 9]).toBeNaN();
    expect(spectra.flags[14 * 512 + 9]).toBe(0);
  });

  it("refuses calibrations of another readout, and a sky from one fibre", () => {
    const attempt = (change: object) => () =>
      calibrateSpectra(night(1), DIGEST, { solution, name: "sci.fits", ...change });
    expect(attempt({ solution: { ...solution, geometryDigest: "other" } })).toThrow(
      "sci.fits: 40 fibres × 512 columns, but the wavelengths given belong to another readout window (sections, axis or binning differ); reduce an arc of the same readout window",
    );
    expect(attempt({ throughput: { ...throughput, nFibre: 39 } })).toThrow(
      "the throughput given belong to 39 fibres × 512 columns",
    );
    expect(attempt({ skyFibres: [2] })).toThrow(
      "sci.fits: 1 of its 1 sky fibres have a spectrum with wavelengths, but a sky takes at least two",
    );
  });
});
