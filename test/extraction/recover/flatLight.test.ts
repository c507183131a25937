/** The flat's known light against the simulator's truth, flaws among its pixels included. */
import { beforeAll, describe, expect, it } from "vitest";
import { planExtraction } from "../../../src/extraction/plan.js";
import { type FlatLight, measureFlatLight } from "../../../src/extraction/recover/flatLight.js";
import { ProfileLight } from "../../../src/extraction/recover/light.js";
import { planZones } from "../../../src/extraction/recover/zones.js";
import { median } from "../../../src/reference/median.js";
import type { SimulatedExposure } from "../../../src/simulate/exposure.js";
import { combineFlats } from "../../../src/tramlines/flat.js";
import type { Tramlines } from "../../../src/tramlines/tramlines.js";
import { BENCH, CLEAN, correctedFrame, empiricalLines, exposureOf, gaussianLines } from "../benchScene.js";
import { tramlinesFromTruth } from "../fromTruth.js";

function lightOf(exposure: SimulatedExposure, lines: Tramlines): { light: FlatLight; ratios: number[] } {
  const plan = planExtraction(lines);
  const zones = planZones(lines, plan.active);
  const light = measureFlatLight(combineFlats([correctedFrame(exposure)]), zones, new ProfileLight(lines, plan));
  const { nx, flux } = exposure.truth;
  const ratios = plan.active.map((k, i) =>
    median(Array.from({ length: nx }, (_, x) => light.known[i * nx + x] / flux[k * nx + x])),
  );
  return { light, ratios };
}

const farthest = (ratios: number[]) => Math.max(...ratios.map((ratio) => Math.abs(ratio - 1)));

describe("light known by plain sums", () => {
  it("is the truth to 0.3 % for every fibre of pure Gaussians, whatever width is believed", () => {
    const exposure = exposureOf(CLEAN, "fflat_02");
    const lines = tramlinesFromTruth(exposure);
    const right = lightOf(exposure, lines).ratios;
    expect(farthest(right)).toBeLessThan(0.003);
    const sigma = lines.profile.sigma.map((one) => 1.05 * one);
    const wide = lightOf(exposure, { ...lines, profile: { ...lines.profile, sigma } }).ratios;
    // What a width 5 % off changes in the known light is far below the 2.5 % that it does to weighted sums.
    expect(Math.max(...wide.map((ratio, k) => Math.abs(ratio - right[k])))).toBeLessThan(0.003);
  });

  let exposure: SimulatedExposure;
  let empirical: FlatLight;
  let ratios: number[];
  beforeAll(async () => {
    exposure = exposureOf(BENCH, "fflat_02");
    ({ light: empirical, ratios } = lightOf(
      exposure,
      await empiricalLines(correctedFrame(exposureOf(BENCH, "fflat_01"))),
    ));
  });

  it("is the truth to 0.5 % with wings and scattered light; to 2.5 % and too little by Gaussians", async () => {
    expect(farthest(ratios)).toBeLessThan(0.005);
    expect(Math.abs(median(ratios) - 1)).toBeLessThan(0.002);
    const gaussian = lightOf(exposure, await gaussianLines(correctedFrame(exposureOf(BENCH, "fflat_01")))).ratios;
    expect(median(gaussian)).toBeLessThan(median(ratios));
    expect(farthest(gaussian)).toBeLessThan(0.025);
  });

  it("takes out cosmic rays and the bad column, and little else", () => {
    const { nx, ny, cosmicRays, bad } = exposure.truth;
    const seen = correctedFrame(exposure).electrons;
    let nLeft = 0;
    for (let i = 0; i < nx * ny; i++) {
      if (bad[i] || cosmicRays[i] > 1000 + 0.2 * seen[i]) if (empirical.pixels[i] === seen[i]) nLeft++;
    }
    expect(nLeft).toBe(0);
    const nTrue = cosmicRays.reduce((n, electrons, i) => n + (electrons > 0 || bad[i] ? 1 : 0), 0);
    expect(empirical.nFlaw).toBeGreaterThan(ny - 1);
    expect(empirical.nFlaw).toBeLessThan(nTrue + 0.0005 * nx * ny);
  });
});
