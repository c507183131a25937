/** Closed form: two unresolved lines of light e₁, e₂ a distance d apart have their middle at d·e₂/(e₁ + e₂) from the first. */
import { describe, expect, it } from "vitest";
import { blendPulls } from "../../src/calibration/blends.js";
import type { LineList } from "../../src/calibration/lamps.js";

const LIST: LineList = {
  //                              alone   pair of one lamp   pair of two lamps   alone   pair with a dark lamp  unknown
  wavelength: Float64Array.of(6000, 6100, 6101, 6200, 6200.5, 6300, 6400, 6402, 6500, 6501),
  medium: "air",
  strength: Float64Array.of(10, 90, 10, 20, 5, 50, 40, 8, Number.NaN, 4),
  lamp: ["a", "a", "a", "a", "b", "b", "a", "c", "a", "a"],
  source: "made up",
};

describe("pulls of unresolved companions", () => {
  it("follow listed strength times the lamp's brightness, companions counted three times", () => {
    // Lamp a: 100 e⁻ a unit of strength; b: 2; c has no line that stands alone.
    const seen = [
      { line: 0, electrons: 1000 },
      { line: 5, electrons: 100 },
    ];
    const pulls = blendPulls(LIST, seen, [6600, 5900], 50, 3);
    expect(pulls[0]).toBe(0);
    expect(pulls[1]).toBeCloseTo(30 / 120, 12);
    expect(pulls[2]).toBeCloseTo(270 / 280, 12);
    expect(pulls[3]).toBeCloseTo((0.5 * 30) / 2030, 12);
    expect(pulls[4]).toBeCloseTo((0.5 * 6000) / 6010, 12);
    expect(pulls[6]).toBe(2);
    expect(pulls[8]).toBe(1);
    expect([...blendPulls(LIST, seen, [6600, 5900], 50, 0.4)]).toEqual(new Array(10).fill(0));
  });

  it("of a lamp that was not seen, at most the faintest peak", () => {
    const pulls = blendPulls(LIST, [{ line: 0, electrons: 1000 }], [5900, 6600], 50, 1);
    // Lamp b: its line at 6300 is missing, so at most 50 e⁻ for a strength of 50.
    expect(pulls[3]).toBeCloseTo((0.5 * 15) / 2015, 12);
  });
});
