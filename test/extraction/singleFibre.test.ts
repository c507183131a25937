/** Cross-talk seen in frames with single lit fibres, against the truth of the frame and against the profile model. */
import { beforeAll, describe, expect, it } from "vitest";
import { type Extraction, extractFrame } from "../../src/extraction/extract.js";
import { measureSingleFibre } from "../../src/extraction/singleFibre.js";
import type { SimulatedExposure } from "../../src/simulate/exposure.js";
import type { Tramlines } from "../../src/tramlines/tramlines.js";
import { frameFromTruth, tramlinesFromTruth } from "./fromTruth.js";
import { type BenchChange, bench, nFibre, readNoise } from "./twoBlocks.js";

const pitch = 4.3;
let lines: Tramlines;
const extractions = new Map<string, Extraction>();

beforeAll(async () => {
  const science = bench("science", { pitch });
  lines = tramlinesFromTruth(science);
  for (const method of ["boxcar", "optimal"] as const) {
    const options = { method, background: false, shift: false } as const;
    extractions.set(method, await extractFrame(frameFromTruth(science, readNoise), lines, options));
  }
});

/** A flat lamp on the fibres of `lit` alone; all else as in the science frame. */
function singles(lit: number[], change: BenchChange = {}) {
  const dead = Array.from({ length: nFibre }, (_, k) => k + 1).filter((fibre) => !lit.includes(fibre));
  return bench("fibre-flat", { pitch, dead, ...change });
}

/** Share of the lit fibre's light on the aperture of `fibre`, over that on its own: from the frame's expectation. */
function trueRatio(exposure: SimulatedExposure, lit: number, fibre: number): number {
  const { halfAperture } = extractions.get("boxcar")!.fit.input;
  const { truth } = exposure;
  const expected = truth.expectedElectrons();
  const within = (k: number) => {
    let sum = 0;
    for (let x = 0; x < truth.nx; x++) {
      const y0 = truth.trace[k * truth.nx + x];
      for (let y = Math.ceil(y0 - 4); y <= y0 + 4; y++) {
        const inside = Math.min(y + 0.5, y0 + halfAperture) - Math.max(y - 0.5, y0 - halfAperture);
        if (inside > 0) sum += inside * expected[y * truth.nx + x];
      }
    }
    return sum;
  };
  return within(fibre - 1) / within(lit - 1);
}

describe("single lit fibres", () => {
  it.each(["boxcar", "optimal"])("show %s what the profile model says, within errors", async (method) => {
    const extraction = extractions.get(method)!;
    const exposure = singles([2, 10], { exposure: "shift = 0.3" });
    const check = await measureSingleFibre(frameFromTruth(exposure, readNoise), lines, extraction);
    expect(check.estimator).toBe(method);
    expect(check.nDisagree).toBe(0);
    expect(check.warnings).toEqual([]);
    const next = check.leaks.filter(({ lit, fibre }) => Math.abs(lit - fibre) === 1);
    expect(next.map(({ lit, fibre }) => [lit, fibre])).toEqual([
      [2, 1],
      [2, 3],
      [10, 9],
      [10, 11],
    ]);
    for (const { share, error, model } of next) {
      expect(share).toBeGreaterThan(20 * error);
      expect(Math.abs(share - model)).toBeLessThan(4 * error);
      expect(error).toBeGreaterThan(0);
    }
    if (method === "optimal") return;
    for (const { lit, fibre, share, error } of next) {
      expect(Math.abs(share - trueRatio(exposure, lit, fibre))).toBeLessThan(4 * error);
    }
  });

  it("warn when the profile is another than the model's", async () => {
    const exposure = singles([10], { fwhm: 2.75 });
    const check = await measureSingleFibre(frameFromTruth(exposure, readNoise), lines, extractions.get("boxcar")!);
    expect(check.nDisagree).toBeGreaterThanOrEqual(2);
    expect(check.warnings).toHaveLength(1);
    expect(check.warnings[0]).toMatch(
      /^one: light at \d of \d+ dark fibres differs from the cross-talk matrix by over 4 σ; worst, fibre (9|11) holds [\d.]+ % ± [\d.]+ % of fibre 10's light where the profile has [\d.]+ %/,
    );
    const [below] = check.leaks.filter(({ fibre }) => fibre === 9);
    expect(Math.abs(below.share - trueRatio(exposure, 10, 9))).toBeLessThan(4 * below.error);
    expect(below.share).toBeGreaterThan(1.2 * below.model);
  });

  it("are not spoilt by a cosmic ray on a dark fibre", async () => {
    const exposure = singles([10]);
    const frame = frameFromTruth(exposure, readNoise);
    const { truth } = exposure;
    const plain = await measureSingleFibre(frame, lines, extractions.get("boxcar")!);
    for (const x of [71, 72, 200]) {
      frame.electrons[Math.round(truth.trace[8 * truth.nx + x]) * truth.nx + x] += 40_000;
    }
    const hit = await measureSingleFibre(frame, lines, extractions.get("boxcar")!);
    const at9 = ({ leaks }: typeof hit) => leaks.find(({ fibre }) => fibre === 9)!;
    expect(Math.abs(at9(hit).share - at9(plain).share)).toBeLessThan(at9(plain).error);
  });

  it("are refused when all fibres are lit, or none", async () => {
    const extraction = extractions.get("boxcar")!;
    const all = frameFromTruth(bench("fibre-flat", { pitch }), readNoise);
    await expect(measureSingleFibre(all, lines, extraction)).rejects.toThrow(
      "one: 12 of 12 fibres are lit, but a frame with one or a few lit fibres was expected",
    );
    const none = frameFromTruth(singles([]), readNoise);
    await expect(measureSingleFibre(none, lines, extraction)).rejects.toThrow(
      "one: no fibre stands out of the noise, but a frame with one or a few lit fibres was expected",
    );
  });
});
