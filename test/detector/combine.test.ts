import { describe, expect, it } from "vitest";
import { combineFrames, type StackFrame } from "../../src/detector/combine.js";
import { normalDeviate, poissonDeviate } from "../scene.js";
import { momentsOf, seeded } from "./rawFrames.js";

const NX = 90;
const NY = 70;
const READ_VARIANCE = 3.4 ** 2;
/** Two amplifiers of unequal noise, side by side. */
const REGIONS = [
  { x0: 0, x1: 40, y0: 0, y1: NY, readVariance: READ_VARIANCE },
  { x0: 40, x1: NX, y0: 0, y1: NY, readVariance: 25 },
];

function frameOf(value: (x: number, y: number) => number, scale = 1): StackFrame {
  const electrons = Float32Array.from({ length: NX * NY }, (_, i) => value(i % NX, Math.floor(i / NX)));
  return { electrons, mask: new Uint8Array(NX * NY), regions: REGIONS, scale };
}

const readNoise = (x: number) => Math.sqrt(x < 40 ? READ_VARIANCE : 25);

describe("stacks", () => {
  it.each([1, 2, 3, 5])("of %i frames: the mean, with pulls of 1", (n) => {
    const next = seeded(n);
    const truth = (x: number, y: number) => 5 + 0.1 * x - 0.05 * y;
    const frames = Array.from({ length: n }, () => frameOf((x, y) => truth(x, y) + readNoise(x) * normalDeviate(next)));
    const stack = combineFrames(frames, NX, NY, false);
    expect(stack.variance[3]).toBeCloseTo(READ_VARIANCE / n, 4);
    expect(stack.variance[60]).toBeCloseTo(25 / n, 4);
    const pulls = stack.mean.map(
      (value, i) => (value - truth(i % NX, Math.floor(i / NX))) / Math.sqrt(stack.variance[i]),
    );
    const { mean, sigma } = momentsOf(pulls);
    expect(Math.abs(mean)).toBeLessThan(4 / Math.sqrt(NX * NY));
    expect(Math.abs(sigma - 1)).toBeLessThan(4 / Math.sqrt(2 * NX * NY));
  });

  it.each([2, 3, 4, 5])(
    "of %i frames lose a cosmic ray in one of them, which the sample's own scatter could not",
    (n) => {
      const next = seeded(40 + n);
      const frames = Array.from({ length: n }, () => frameOf((x) => readNoise(x) * normalDeviate(next)));
      const hits = [5 + 90 * 5, 41 + 90 * 33, 89 + 90 * 69];
      for (const at of hits) frames[n - 1].electrons[at] += 400;
      const stack = combineFrames(frames, NX, NY, false);
      for (const at of hits) {
        expect(Math.abs(stack.mean[at])).toBeLessThan(5 * readNoise(at % NX));
        expect(stack.variance[at]).toBeCloseTo(readNoise(at % NX) ** 2 / (n - 1), 4);
      }
      expect(stack.clippedShare[n - 1] * NX * NY).toBeGreaterThan(2.5);
      expect(stack.clippedShare[n - 1] * NX * NY).toBeLessThan(5.5);
      // Beyond 5 σ of a median that is noisy itself (4.4 σ of both): 0.4 of 31 500 good values are expected there.
      for (const share of stack.clippedShare.slice(0, -1)) expect(share * NX * NY).toBeLessThan(2.5);
    },
  );

  it("weigh by scale: Σ value / Σ scale, variance (Σ read + Σ photons) / (Σ scale)²", () => {
    const values = [130, 275, 50];
    const scales = [1.5, 2.5, 0.5];
    const frames = values.map((value, i) => frameOf(() => value, scales[i]));
    const stack = combineFrames(frames, NX, NY, true);
    expect(stack.mean[7]).toBeCloseTo(455 / 4.5, 4);
    expect(stack.variance[7]).toBeCloseTo((3 * READ_VARIANCE + 455) / 4.5 ** 2, 4);
    expect(stack.variance[50]).toBeCloseTo((75 + 455) / 4.5 ** 2, 4);
  });

  it("clip bright frames against photons and read noise together", () => {
    const next = seeded(8);
    const levels = [20000, 26000, 23000];
    const frames = levels.map((level) =>
      frameOf((x) => poissonDeviate(level * (1 + 0.002 * x), next) + readNoise(x) * normalDeviate(next), level),
    );
    frames[1].electrons[300] += 8 * Math.sqrt(26000);
    const stack = combineFrames(frames, NX, NY, true);
    expect(stack.clippedShare.map((share) => Math.round(share * NX * NY))).toEqual([0, 1, 0]);
    const pulls = stack.mean.map((value, i) => (value - (1 + 0.002 * (i % NX))) / Math.sqrt(stack.variance[i]));
    const { mean, sigma } = momentsOf(pulls);
    expect(Math.abs(mean)).toBeLessThan(4 / Math.sqrt(NX * NY));
    expect(Math.abs(sigma - 1)).toBeLessThan(4 / Math.sqrt(2 * NX * NY));
  });

  it("leave masked and empty pixels out, and have no value where no frame has one", () => {
    const frames = [10, 12, 17].map((value) => frameOf(() => value));
    frames[2].mask[5] = 2;
    frames[0].electrons[6] = Number.NaN;
    for (const frame of frames) frame.electrons[7] = Number.NaN;
    const stack = combineFrames(frames, NX, NY, false);
    expect([stack.mean[5], stack.mean[6]]).toEqual([11, 14.5]);
    expect(stack.variance[6]).toBeCloseTo(READ_VARIANCE / 2, 4);
    expect([stack.mean[7], stack.variance[7]]).toEqual([Number.NaN, Number.NaN]);
  });

  it("of two allow their difference both their noises: 6 σ of one is kept, 7.5 σ is not", () => {
    const pair = (sigmas: number) => [frameOf(() => 2), frameOf(() => 2 + 3.4 * sigmas)];
    expect(combineFrames(pair(6), NX, NY, false).mean[0]).toBeCloseTo(2 + 3.4 * 3, 4);
    expect(combineFrames(pair(7.5), NX, NY, false).mean[0]).toBe(2);
  });

  it("of four keep the lowest when two pairs disagree beyond noise", () => {
    const frames = [100, 900, 103, 905].map((value) => frameOf(() => value));
    expect(combineFrames(frames, NX, NY, false).mean[0]).toBe(100);
  });
});
