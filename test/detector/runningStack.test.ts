import { describe, expect, it } from "vitest";
import { combineFrames, type StackFrame } from "../../src/detector/combine.js";
import { RunningStack } from "../../src/detector/runningStack.js";
import { judgeMissing, python } from "../judges.js";
import { normalDeviate, poissonDeviate } from "../scene.js";
import { momentsOf, seeded } from "./rawFrames.js";

const NX = 70;
const NY = 60;
const REGIONS = [
  { x0: 0, x1: 30, y0: 0, y1: NY, readVariance: 3.1 ** 2 },
  { x0: 30, x1: NX, y0: 0, y1: NY, readVariance: 5.6 ** 2 },
];
const sigmaOf = (x: number) => Math.sqrt(REGIONS[x < 30 ? 0 : 1].readVariance);
const truth = (i: number) => 9 + 0.08 * (i % NX) - 0.03 * Math.floor(i / NX);

/** Frames with photons of their own and a hit on every hundredth pixel. */
function frames(n: number, seed: number): StackFrame[] {
  const next = seeded(seed);
  return Array.from({ length: n }, (_, k) => {
    const scale = 1 + 0.37 * k;
    const electrons = Float32Array.from({ length: NX * NY }, (__, i) => {
      const hit = next() < 0.01 ? 60 + 4000 * next() : 0;
      return poissonDeviate(scale * truth(i), next) + sigmaOf(i % NX) * normalDeviate(next) + hit;
    });
    return { electrons, mask: new Uint8Array(NX * NY), regions: REGIONS, scale };
  });
}

const run = (all: StackFrame[], nCentre: number, photons = true) => {
  const running = new RunningStack(combineFrames(all.slice(0, nCentre), NX, NY, photons), NX, photons);
  for (const frame of all) running.add(frame);
  return running.finish();
};

describe("running stacks", () => {
  it("of forty frames: the truth within their errors, hits clipped", () => {
    const stack = run(frames(40, 3), 7);
    const pulls = stack.mean.map((value, i) => (value - truth(i)) / Math.sqrt(stack.variance[i]));
    const { mean, sigma } = momentsOf(pulls);
    expect(Math.abs(mean)).toBeLessThan(4 / Math.sqrt(NX * NY));
    expect(Math.abs(sigma - 1)).toBeLessThan(4 / Math.sqrt(2 * NX * NY));
    for (const share of stack.clippedShare)
      expect(Math.abs(share - 0.01)).toBeLessThan(4 * Math.sqrt(0.01 / (NX * NY)));
  });

  it("differ from stacks of held frames only where a hit is as faint as noise", () => {
    const all = frames(9, 5);
    const [running, held] = [run(all, 7), combineFrames(all, NX, NY, true)];
    const same = running.mean.filter((value, i) => Math.abs(value - held.mean[i]) <= 1e-6 * Math.abs(value)).length;
    expect(same / (NX * NY)).toBeGreaterThan(0.995);
  });

  it.skipIf(judgeMissing("astropy"))("clip and average as astropy does about that centre with that σ", () => {
    const all = frames(12, 8);
    const centre = combineFrames(all.slice(0, 7), NX, NY, true);
    const [c, v] = [Array.from(centre.mean), Array.from(centre.variance)];
    const stack = run(all, 7);
    const script = `
import json, sys
import numpy as np
from astropy.stats import sigma_clip
job = json.load(sys.stdin)
c, v, read = (np.array(job[k]) for k in ("centre", "variance", "read"))
kept = []
for value, scale in zip(job["values"], job["scales"]):
    # In units of the σ predicted: clipped about 0 with a σ of 1 that the sample has no say in.
    pull = (np.array(value) - scale * c) / np.sqrt(read + np.maximum(scale * c, 0) + scale * scale * v)
    out = sigma_clip(pull, sigma=5, cenfunc=lambda a, axis=None: 0.0, stdfunc=lambda a, axis=None: 1.0, maxiters=1)
    kept.append(np.ma.array(value, mask=np.ma.getmaskarray(out)))
kept = np.ma.array(kept)
scales = np.ma.array(np.broadcast_to(np.array(job["scales"])[:, None], kept.shape), mask=kept.mask)
mean = kept.sum(axis=0) / scales.sum(axis=0)
variance = (read * kept.count(axis=0) + np.maximum(kept.sum(axis=0), 0)) / scales.sum(axis=0) ** 2
print(json.dumps({"mean": mean.tolist(), "variance": variance.tolist(), "clipped": kept.mask.mean(axis=1).tolist()}))`;
    const job = {
      ...{ centre: c, variance: v, read: c.map((_, i) => sigmaOf(i % NX) ** 2) },
      ...{ values: all.map(({ electrons }) => Array.from(electrons)), scales: all.map(({ scale }) => scale) },
    };
    const judged = JSON.parse(python(script, [], JSON.stringify(job)));
    stack.clippedShare.forEach((share, i) => {
      expect(share).toBeCloseTo(judged.clipped[i], 12);
    });
    for (const key of ["mean", "variance"] as const) {
      const worst = Math.max(...stack[key].map((value, i) => Math.abs(value / judged[key][i] - 1)));
      expect(worst).toBeLessThan(2 ** -23);
    }
  });

  it("have a value where only frames outside the centre have one, and none where no frame has", () => {
    const all = frames(9, 11);
    for (const frame of all.slice(0, 7)) frame.mask[17] = 1;
    for (const frame of all) frame.electrons[18] = Number.NaN;
    const { mean, variance } = run(all, 7);
    const last = all.slice(7);
    const scale = last[0].scale + last[1].scale;
    const sum = last[0].electrons[17] + last[1].electrons[17];
    expect(mean[17]).toBeCloseTo(sum / scale, 5);
    expect(variance[17]).toBeCloseTo((2 * REGIONS[0].readVariance + sum) / scale ** 2, 4);
    expect([mean[18], variance[18]]).toEqual([Number.NaN, Number.NaN]);
  });

  it("keep the centre where nothing agrees with it", () => {
    const all = frames(9, 12);
    const centre = combineFrames(all.slice(0, 7), NX, NY, true);
    const kept = centre.mean[40];
    const running = new RunningStack(centre, NX, true);
    for (const frame of all) {
      frame.electrons[40] += 1e5;
      running.add(frame);
    }
    expect(running.finish().mean[40]).toBe(kept);
  });
});
