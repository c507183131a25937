/** Scales of frames whose truth is known. */
import { describe, expect, test } from "vitest";
import { alignFrames } from "../../src/calibration/alignFrames.js";
import { fitScales } from "../../src/calibration/exposureScale.js";
import { type FrameTruth, frameOf } from "./stacks.js";

const size: [number, number] = [24, 300];
const stack = (light: (k: number, x: number) => number, frames: FrameTruth[], name: string) =>
  fitScales(
    alignFrames(
      frames.map((truth, i) => frameOf(size, light, `${name} ${i}`, truth)),
      0.05,
    ),
  );
/** Fibres from faint to bright, with a line each. */
const field = (k: number, x: number) => 30 * (1 + k) * (1 + 4 * Math.exp(-(((x - 100 - 3 * k) / 1.5) ** 2)));

describe("scales", () => {
  test("are found within their errors, whatever the exposure times say", () => {
    const scales = stack(
      field,
      [{}, { scale: 0.35, seconds: 900 }, { scale: 2.2, seconds: 900 }, { scale: 1.05 }],
      "four",
    );
    expect(scales[0]).toMatchObject({ scale: 1, error: 0, from: "light" });
    [1, 0.35, 2.2, 1.05].forEach((truth, i) => {
      expect(Math.abs(scales[i].scale - truth), String(i)).toBeLessThan(4 * scales[i].error + 1e-9);
      // 24 fibres of some 375 e⁻ in 300 columns hold 2.7e6 e⁻: 0.06 % for the fainter of two, a median a quarter worse.
      expect(scales[i].error).toBeLessThan(0.004 * truth + 1e-9);
      expect([...scales[i].fibre].filter((_, j) => j % 2 === 0)).toEqual(new Array(24).fill(1));
    });
  });

  test("of two frames go by the first", () => {
    const scales = stack(field, [{}, { scale: 0.6, seconds: 900 }], "two");
    expect(Math.abs(scales[1].scale - 0.6)).toBeLessThan(4 * scales[1].error);
    expect(scales[1].error).toBeLessThan(0.004);
  });

  test("have no bias where noise rules: many faint frames, 16 times over", () => {
    // 3 e⁻ on a read noise of 5: least squares against the mean of 5 frames would be off by σ²/5/9 ≈ 60 %.
    const off = Array.from({ length: 16 }, (_, trial) => {
      const scales = stack(
        () => 3,
        [{}, { scale: 2, seconds: 900 }, {}, { scale: 2, seconds: 900 }, { scale: 2, seconds: 900 }],
        `faint ${trial}`,
      );
      return Math.log(scales[1].scale / 2);
    });
    const mean = off.reduce((a, b) => a + b, 0) / 16;
    const scatter = Math.sqrt(off.reduce((sum, one) => sum + (one - mean) ** 2, 0) / 15);
    expect(Math.abs(mean)).toBeLessThan((4 * scatter) / Math.sqrt(16));
    expect(scatter).toBeLessThan(0.1);
  });

  test("of single fibres are told where they are beyond doubt, with their slope", () => {
    const lost: FrameTruth = { own: (k, x) => (k === 20 ? 0.4 : k === 21 ? 1 + 0.2 * ((2 * x) / 299 - 1) : 1) };
    const scales = stack(field, [{}, lost, {}, {}], "own");
    expect(scales[1].scale).toBeCloseTo(1, 2);
    expect(scales[1].fibre[2 * 20]).toBeCloseTo(0.4, 1);
    expect(scales[1].fibre[2 * 21]).toBeCloseTo(1, 1);
    expect(scales[1].fibre[2 * 21 + 1]).toBeCloseTo(0.2, 1);
    expect(scales[1].scatter).toBeLessThan(0.02);
    expect([...scales[0].fibre.subarray(0, 40)]).toEqual(Array.from({ length: 40 }, (_, j) => 1 - (j % 2)));
  });

  test("are not moved by hits", () => {
    const hits = Array.from({ length: 300 }, (_, j): [number, number, number] => [j % 24, (j * 7) % 300, 3e4]);
    const scales = stack(field, [{}, { hits }, {}], "hits");
    expect(Math.abs(scales[1].scale - 1)).toBeLessThan(5 * scales[1].error);
    expect(scales[1].error).toBeLessThan(0.005);
  });

  test("come from the exposure times where there is no light, and are small for a frame that has none", () => {
    const dark = stack(() => 0, [{}, { seconds: 450 }, { seconds: Number.NaN }], "dark");
    expect(dark.map(({ scale, from }) => [scale, from])).toEqual([
      [1, "exposure time"],
      [0.5, "exposure time"],
      [1, "nothing"],
    ]);
    const cloud = stack(field, [{}, { scale: 0.001, seconds: 900 }, {}], "cloud");
    expect(cloud[1].scale).toBeLessThan(0.01);
  });

  test("of another field scatter", () => {
    const other: FrameTruth = { light: (k, x) => field((7 * k + 11) % 24, x) };
    const scales = stack(field, [{}, {}, other], "field");
    expect(scales[2].scatter).toBeGreaterThan(0.5);
    expect(Math.max(scales[0].scatter, scales[1].scatter)).toBeLessThan(0.1);
  });
});
