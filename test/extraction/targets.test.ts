/** Sums over a target's fibres: variances against a dense covariance reckoned elsewhere, and against many noisy columns. */
import { mkdtempSync, rmSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { beforeAll, describe, expect, it } from "vitest";
import type { Frame } from "../../src/detector/frame.js";
import { sampledColumns } from "../../src/extraction/crosstalkMatrix.js";
import { type Extraction, extractFrame } from "../../src/extraction/extract.js";
import { Flag } from "../../src/extraction/spectra.js";
import { neglectedShare, sumFibres } from "../../src/extraction/targets.js";
import type { SimulatedExposure } from "../../src/simulate/exposure.js";
import { judgeMissing, python } from "../judges.js";
import { frameFromTruth, tramlinesFromTruth } from "./fromTruth.js";
import { bench, readNoise } from "./twoBlocks.js";

const targets = [
  { name: "three in a row", fibres: [8, 9, 10] },
  { name: "with a dead one", fibres: [5, 3, 4] },
  { name: "one apart", fibres: [11, 13] },
];
const options = { background: false, shift: false, cosmicRays: false } as const;
const nx = 4800;
/** Crowded: neighbours share a good part of their pixels. */
const crowded = { pitch: 2.9, nx, science: "faintest = 900\nbrightest = 4000" };
/** Apertures that overlap, so that plain sums share pixels. */
const halfAperture = 2.4;
let exposure: SimulatedExposure;
let joint: Extraction;
let quiet: Frame;

beforeAll(async () => {
  exposure = bench("science", crowded);
  quiet = {
    ...frameFromTruth(exposure, readNoise),
    electrons: Float32Array.from(exposure.truth.expectedElectrons()),
  };
  joint = await extractFrame(frameFromTruth(exposure, readNoise), tramlinesFromTruth(exposure), options);
});

/** cov = (AᵀN⁻¹A)⁻¹ as a dense matrix, N of the true light; gᵀ·cov·g for each target and column. */
const denseScript = `
import json, sys
import numpy as np
from scipy.special import erf
q = json.load(open(sys.argv[1]))
out = []
for c in q["columns"]:
    edges = np.arange(q["ny"] + 1) - 0.5
    A = np.array([0.5 * np.diff(erf((edges - y) / (s * np.sqrt(2)))) for y, s in zip(c["centre"], c["sigma"])]).T
    v = q["readNoise"] ** 2 + A @ np.array(c["flux"])
    cov = np.linalg.inv(A.T @ (A / v[:, None]))
    out.append([float(np.array(g) @ cov @ np.array(g)) for g in q["groups"]])
print(json.dumps(out))
`;

function denseVariances(columns: number[]): number[][] {
  const { truth } = exposure;
  const live = Array.from({ length: truth.nFibre }, (_, k) => k).filter((k) => truth.lit[k]);
  const question = {
    ny: truth.ny,
    readNoise,
    groups: targets.map(({ fibres }) => live.map((k) => (fibres.includes(k + 1) ? 1 : 0))),
    columns: columns.map((x) => ({
      centre: live.map((k) => truth.trace[k * nx + x]),
      sigma: live.map((k) => truth.sigma[k * nx + x]),
      flux: live.map((k) => truth.flux[k * nx + x]),
    })),
  };
  const folder = mkdtempSync(join(tmpdir(), "hatchel-dense-"));
  writeFileSync(join(folder, "question.json"), JSON.stringify(question));
  const answer = python(denseScript, [join(folder, "question.json")]);
  rmSync(folder, { recursive: true });
  return JSON.parse(answer);
}

describe("sums of fibres", () => {
  it.skipIf(judgeMissing("scipy"))(
    "have the variance of the dense covariance, but for the share said to be neglected",
    async () => {
      // Without noise the model's variances are the true ones, so that nothing else stands between the two.
      const extraction = await extractFrame(quiet, tramlinesFromTruth(exposure), options);
      const columns = sampledColumns(nx);
      const dense = denseVariances(columns);
      const sums = sumFibres(extraction.spectra, targets);
      const neglected = neglectedShare(extraction, sums);
      targets.forEach((_target, t) => {
        const shares = columns.map((x, i) => (dense[i][t] - sums.variance[t * nx + x]) / dense[i][t]);
        const worst = shares.reduce((a, b) => (Math.abs(b) > Math.abs(a) ? b : a));
        // Variances settle to 0.1 σ of the flux: 1e-3 of them for 3000 e⁻.
        expect(Math.abs(worst - neglected[t]), targets[t].name).toBeLessThan(2e-3);
      });
      // Three fibres at 2.7 σ: those outside have a positive covariance, and without it the sum says too little; over the
      // place of a dead fibre the next ones are anticorrelated, and it says too much.
      expect(neglected[0]).toBeGreaterThan(0.01);
      expect(neglected[1]).toBeLessThan(-0.004);
      expect(neglected[2]).toBeGreaterThan(0.01);
    },
  );

  it.each([
    ["joint", true],
    ["optimal", true],
    ["boxcar", true],
    ["boxcar", false],
  ] as const)(
    "scatter as their variances say, %s, corrected: %s; variances added alone do not",
    async (method, crosstalk) => {
      const own = { ...options, method, crosstalk, halfAperture };
      const lines = tramlinesFromTruth(exposure);
      const extraction = await extractFrame(frameFromTruth(exposure, readNoise), lines, own);
      // Without correction neighbours' light is in the expectation too: a frame without noise has it.
      const still = await extractFrame(quiet, lines, own);
      const { spectra } = extraction;
      const [sums, expected] = [spectra, still.spectra].map((one) => sumFibres(one, targets));
      let [honest, alone] = [0, 0];
      for (let x = 0; x < nx; x++) {
        const error = sums.flux[x] - expected.flux[x];
        const bare = [8, 9, 10].reduce((sum, fibre) => sum + spectra.variance[(fibre - 1) * nx + x], 0);
        honest += (error * error) / sums.variance[x] / nx;
        alone += (error * error) / bare / nx;
      }
      // χ² of nx columns over nx scatters by √(2/nx) = 0.020; four of those, and what is neglected beyond neighbours.
      const band = 4 * Math.sqrt(2 / nx) + Math.abs(neglectedShare(extraction, sums)[0]);
      expect(Math.abs(honest - 1)).toBeLessThan(band);
      expect(Math.abs(alone - 1)).toBeGreaterThan(band);
      expect(alone > 1).toBe(!crosstalk);
    },
  );

  it("leave dead fibres out, keep all flags, and have no value where a fibre has none", () => {
    const spectra = {
      ...joint.spectra,
      flux: joint.spectra.flux.slice(),
      flags: joint.spectra.flags.slice(),
    };
    spectra.flux[8 * nx + 70] = Number.NaN;
    spectra.flags[8 * nx + 70] |= Flag.weightLost;
    spectra.flags[9 * nx + 70] |= Flag.cosmicRay;
    const sums = sumFibres(spectra, [...targets, { name: "dark", fibres: [4] }]);
    expect(sums.used).toEqual([[8, 9, 10], [3, 5], [11, 13], []]);
    expect([sums.flux[70], sums.variance[70]]).toEqual([Number.NaN, Number.NaN]);
    expect(sums.flags[70]).toBe(Flag.weightLost | Flag.cosmicRay);
    expect(sums.flags[71]).toBe(0);
    const [f3, f5] = [spectra.flux[2 * nx + 9], spectra.flux[4 * nx + 9]];
    expect(sums.flux[nx + 9]).toBe(f3 + f5);
    expect(sums.variance[nx + 9]).toBe(spectra.variance[2 * nx + 9] + spectra.variance[4 * nx + 9]);
    expect(sums.flux[3 * nx + 9]).toBeNaN();
    expect(sums.flags[3 * nx + 9]).toBe(Flag.dead);
  });

  it("are refused for fibres that are not there, or named twice", () => {
    const sum = (fibres: number[]) => () => sumFibres(joint.spectra, [{ name: "M", fibres }]);
    expect(sum([3, 14])).toThrow("Target 'M' names slit position 14, but there are 1 to 13.");
    expect(sum([0])).toThrow("Target 'M' names slit position 0, but there are 1 to 13.");
    expect(sum([3, 5, 3])).toThrow("Target 'M' names slit position 3 twice; name it once.");
  });
});
