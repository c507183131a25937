import { beforeAll, describe, expect, it } from "vitest";
import { type Kernels, loadKernels } from "../../src/kernels/module.js";
import { cutThrough } from "../../src/tramlines/cut.js";
import { findPeaks } from "../../src/tramlines/find.js";
import { combineFlats } from "../../src/tramlines/flat.js";
import { type DrawnFlat, drawFlat, type FlatScene } from "./flatScene.js";

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

const layout = { blocks: [13, 10, 14], pitch: 4.9, gap: [4.6, 3.7], dead: [8, 30], sky: [] };
const scene: FlatScene = { seed: 11, nx: 200, layout, fwhm: 2.45, sag: 5, tilt: 3, light: 15_000 };

function peaksOf(drawn: DrawnFlat) {
  const cut = cutThrough(kernels, combineFlats([drawn.frame]));
  return { cut, peaks: findPeaks(kernels, cut, "flat") };
}

/** Every fibre with light has a peak, in order, within `tolerance` px; no other peak is there. The cut stands for its
 * middle column to a few hundredths of a pixel, as far as the slope through it is known. */
function expectAllFound(drawn: DrawnFlat, tolerance: number) {
  const { cut, peaks } = peaksOf(drawn);
  const low = Math.floor(cut.x);
  const at = (y: Float64Array) => y[low] + (cut.x - low) * (y[low + 1] - y[low]);
  const lit = drawn.truth.flatMap((y, k) => (drawn.light[k] > 0 ? [{ y: at(y), light: drawn.light[k] }] : []));
  expect(peaks.length).toBe(lit.length);
  const worst = Math.max(...peaks.map((peak, j) => Math.abs(peak.position - lit[j].y) * Math.min(1, 4 * lit[j].light)));
  expect(worst).toBeLessThan(tolerance);
  return { cut, peaks, lit };
}

describe("finding fibres in a cut", () => {
  it("finds all at sub-pixel precision, with light, width and background", () => {
    const drawn = drawFlat(scene);
    const { peaks, lit } = expectAllFound(drawn, 0.03);
    peaks.forEach((peak, j) => {
      expect(Math.abs(peak.light / (15_000 * lit[j].light) - 1)).toBeLessThan(0.03);
    });
    expect(Math.abs(peaks[0].sigma / drawn.sigma - 1)).toBeLessThan(0.02);
    // The scene has 3 e⁻ per pixel everywhere.
    expect(Math.abs(peaks[18].background - 3)).toBeLessThan(15);
  });

  for (const [pitch, fwhm] of [
    [4, 2],
    [4, 2.5],
    [4, 3],
    [5, 3.8],
    [7, 3],
    [10, 2],
    [10, 4],
  ]) {
    it(`tells fibres ${pitch} px apart of FWHM ${fwhm} px`, () => {
      expectAllFound(drawFlat({ ...scene, layout: { ...layout, pitch, gap: [0.9 * pitch, 0.6 * pitch] }, fwhm }), 0.1);
    });
  }

  it("finds fibres of 5 % of the light between bright neighbours, at pitch 4.9 and 4", () => {
    for (const pitch of [4.9, 4]) {
      const lightOf = { 5: 0.05, 19: 0.055, 37: 0.06, 12: 0.3 };
      expectAllFound(drawFlat({ ...scene, layout: { ...layout, pitch }, lightOf }), 0.05);
    }
  });

  it("takes no cosmic ray for a fibre, and no gap with winged, skewed light around it", () => {
    expectAllFound(drawFlat({ ...scene, nCosmic: 120, seed: 4 }), 0.05);
    expectAllFound(drawFlat({ ...scene, wing: 0.06, skew: 0.5 }), 0.06);
  });

  it("is not misled by bad columns and a bad row between fibres", () => {
    const drawn = drawFlat(scene);
    const { nx, ny, mask, electrons } = drawn.frame;
    for (let y = 0; y < ny; y++) {
      for (const x of [97, 98, 99, 104]) {
        electrons[y * nx + x] = 6e4;
        mask[y * nx + x] = 1;
      }
    }
    const row = Math.round(drawn.truth[3][100] + 2.4);
    for (let x = 0; x < nx; x++) {
      electrons[row * nx + x] = 5e4;
      mask[row * nx + x] = 1;
    }
    expectAllFound(drawn, 0.06);
  });

  it("slides strips along steep and strongly curved tramlines instead of blurring them", () => {
    for (const course of [
      { sag: -60, tilt: 0 },
      { sag: 10, tilt: 25 },
    ]) {
      const drawn = drawFlat({ ...scene, ...course, nx: 512, seed: 21 });
      const { cut, peaks, lit } = expectAllFound(drawn, 0.12);
      expect(Math.abs(peaks[0].sigma / drawn.sigma - 1)).toBeLessThan(0.08);
      const middle = drawn.truth[lit.length >> 1];
      const x = Math.round(cut.x);
      expect(Math.abs(cut.slope - 0.5 * (middle[x + 1] - middle[x - 1]))).toBeLessThan(0.01);
    }
  });

  it("says when there is nothing to find, or when fibres melt into each other", () => {
    const dark = drawFlat({ ...scene, light: 0 });
    expect(() => peaksOf(dark)).toThrow(
      /^flat: no ribbon of light crosses column 1\d\d \(3 e⁻ per pixel in the median/,
    );
    const melted = drawFlat({ ...scene, layout: { ...layout, pitch: 4 }, fwhm: 4 });
    expect(() => peaksOf(melted)).toThrow(
      /told from their neighbours and the background; fibres must stand about 1\.3 times/,
    );
    const blind = drawFlat(scene);
    blind.frame.mask.fill(1);
    expect(() => peaksOf(blind)).toThrow("flat: hardly a pixel about the middle columns is good");
  });
});
