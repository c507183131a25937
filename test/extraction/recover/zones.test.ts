/** Zones and gap levels against sums by hand. */
import { describe, expect, it } from "vitest";
import {
  gapLevels,
  levelAt,
  lightAboveGaps,
  planZones,
  type Zones,
  zonesAt,
} from "../../../src/extraction/recover/zones.js";
import { CLEAN, exposureOf } from "../benchScene.js";
import { tramlinesFromTruth } from "../fromTruth.js";

describe("planZones", () => {
  const { truth } = exposureOf(CLEAN, "sci_01");
  const lines = tramlinesFromTruth(exposureOf(CLEAN, "sci_01"));
  const active = truth.lit.flatMap((lit, k) => (lit ? [k] : []));
  const plan = planZones(lines, active);

  it("sees the dead fibre, the blocks' gaps and both slit ends", () => {
    // Fibres 1 to 11, 12 to 21, 22 to 32, the fifth dead: index of the active fibre below each gap.
    expect(plan.gaps).toEqual([-1, 3, 9, 19, 30]);
    expect(Math.abs(plan.pitch - 4.9)).toBeLessThan(0.15);
  });

  it("borders zones halfway between the true traces", () => {
    const x = 211;
    const { lower, upper, gapAt } = zonesAt(plan, x);
    const y = active.map((k) => truth.trace[k * truth.nx + x]);
    for (let k = 1; k < y.length; k++) {
      expect(lower[k]).toBeCloseTo((y[k - 1] + y[k]) / 2, 9);
      expect(upper[k - 1]).toBe(lower[k]);
    }
    expect(gapAt[1]).toBeCloseTo((y[3] + y[4]) / 2, 9);
    expect(gapAt[0]).toBe(lower[0]);
  });
});

describe("sums above the gaps", () => {
  // Borders inside pixels: a border at 2.75 leaves a quarter of pixel 3 (2.5 … 3.5) to the zone below.
  const column = Float64Array.of(3, 3, 5, 40, 11, 8, 7, 90, 20, 9, 9);
  const zones: Zones = {
    lower: Float64Array.of(0.5, 5.25),
    upper: Float64Array.of(5.25, 9.5),
    gapAt: Float64Array.of(0.75, 5.25, 9.5),
  };

  it("takes a level from one pixel's height, shares counted", () => {
    const levels = gapLevels(column, zones);
    // 0.25 … 1.25 lies over pixels 0 and 1, 4.75 … 5.75 over 5 and 6, 9 … 10 over 9 and 10.
    expect([...levels]).toEqual([3, 0.75 * 8 + 0.25 * 7, 9]);
    expect(levelAt(3, zones, levels)).toBeCloseTo(3 + ((3 - 0.75) / 4.5) * 4.75, 12);
    expect(levelAt(-4, zones, levels)).toBe(3);
    expect(levelAt(30, zones, levels)).toBe(9);
  });

  it("sums pixels and shares of pixels above that line", () => {
    const [first, second] = lightAboveGaps(column, zones);
    // Zone 0.5 … 5.25: pixels 1 to 4 whole and 0.75 of pixel 5.
    const sum = 3 + 5 + 40 + 11 + 0.75 * 8;
    expect(first).toBeCloseTo(sum - 4.75 * (3 + ((2.875 - 0.75) / 4.5) * 4.75), 12);
    const upper = 0.25 * 8 + 7 + 90 + 20 + 9;
    expect(second).toBeCloseTo(upper - 4.25 * (7.75 + ((7.375 - 5.25) / 4.25) * 1.25), 12);
  });
});
