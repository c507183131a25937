/** Values that a lamp's list must hold: the NIST Atomic Spectra Database, from memory, as in the design and in the arcs of the frames
 * beside the project. */
import { describe, expect, it } from "vitest";
import { crowdedLines, joinLines, KNOWN_LAMPS, type LineList, lampLines } from "../../src/calibration/lamps.js";
import { LAMP_TABLES } from "../../src/calibration/lampTables.js";

const PUBLISHED: Record<string, number[]> = {
  Ar: [
    5606.733, 5650.704, 5912.085, 6032.127, 6416.307, 6752.834, 6871.289, 6937.664, 6965.431, 7030.251, 7067.218,
    7147.042, 7272.936, 7383.981, 7503.869, 7514.652, 7635.106, 7723.761, 7948.176, 8115.311, 8264.522,
  ],
  Cu: [5105.537, 5153.232, 5218.202, 5700.237, 5782.127],
  Ne: [
    5852.488, 5881.895, 5944.834, 5975.534, 6029.997, 6074.338, 6096.163, 6143.063, 6163.594, 6217.281, 6266.495,
    6304.789, 6334.428, 6382.992, 6402.248, 6506.528, 6532.882, 6598.953, 6678.276, 6717.043, 6929.467, 7024.05,
    7032.413, 7173.938, 7245.167, 7438.899,
  ],
  // Natural mercury after Sansonetti, Salit & Reader 1996.
  Hg: [4046.565, 4358.335, 5460.75, 5769.61, 5790.67],
};

describe("lamps", () => {
  it.each(Object.entries(PUBLISHED))("%s has the published lines", (lamp, published) => {
    const { wavelength } = lampLines([lamp]);
    for (const line of published) expect(Math.min(...wavelength.map((w) => Math.abs(w - line)))).toBeLessThan(0.0006);
  });

  it("mercury's older values are within the isotope mixes' 0.02 Å", () => {
    const { wavelength } = lampLines(["Hg"]);
    for (const line of [5460.735, 5769.598, 5790.663]) {
      expect(Math.min(...wavelength.map((w) => Math.abs(w - line)))).toBeLessThan(0.02);
    }
  });

  it("each table rises, has a strength a line, and stays where it says", () => {
    for (const lamp of KNOWN_LAMPS) {
      const words = LAMP_TABLES[lamp].lines.trim().split(/\s+/).map(Number);
      expect(words.length % 2).toBe(0);
      const list = lampLines([lamp]);
      expect(list.wavelength.length).toBe(words.length / 2);
      list.wavelength.forEach((wavelength, i) => {
        expect(wavelength).toBeGreaterThan(i === 0 ? 3600 : list.wavelength[i - 1]);
        expect(wavelength).toBeLessThan(9850);
        expect(list.strength[i]).toBeGreaterThan(0);
        expect(list.strength[i]).toBeLessThanOrEqual(100);
      });
      expect(Math.max(...list.strength)).toBe(100);
    }
  });

  it("are known by several names, and come once", () => {
    const neon = lampLines(["Ne"]);
    for (const name of ["NeI", "Ne I", "ne 1", "neon", " NE"]) expect(lampLines([name])).toEqual(neon);
    expect(lampLines(["Ne", "Ne I"])).toEqual(neon);
    expect(() => lampLines(["Ne", "Fe"])).toThrow(
      "There is no line list for a lamp called 'Fe'; known: He, Ne, Ar, Kr, Xe, Hg, Cu, Cd, Zn (neutral atoms); for others name a list of your own as 'lines' under [wavelength] of the spectrograph file.",
    );
    expect(() => lampLines(["argonn"])).toThrow("did you mean Ar?");
    expect(() => lampLines(["Ar II"])).toThrow("called 'Ar II'");
  });

  it("are cut to a range, whichever way round, and mixed in order", () => {
    const list = lampLines(["Hg", "Cu"], [5800, 5600]);
    expect([...list.wavelength]).toEqual([5700.237, 5769.61, 5782.127, 5790.67]);
    expect(list.lamp).toEqual(["Cu", "Hg", "Cu", "Hg"]);
    expect(list.source).toContain("Sansonetti");
  });

  it("in vacuum: 6562.80 → 6564.61 moves neon's 6598.953 by nearly as much", () => {
    const list = lampLines(["Ne"], [6600, 6601], "vacuum");
    expect(list.medium).toBe("vacuum");
    expect(list.wavelength[0] - 6598.953).toBeCloseTo(1.82, 2);
  });
});

const own = (wavelength: number[], strength: number[], lamp: string[], medium: "air" | "vacuum" = "air"): LineList => ({
  wavelength: Float64Array.from(wavelength),
  strength: Float64Array.from(strength),
  lamp,
  medium,
  source: "own",
});

describe("joined lists", () => {
  it("take the later list's value of a line that both have", () => {
    const joined = joinLines([lampLines(["Ne"], [6500, 6540]), own([6506.53, 6532.9], [5, 6], ["Ne", "Ar"])], "air");
    expect([...joined.wavelength]).toEqual([6506.53, 6532.882, 6532.9]);
    expect(joined.lamp).toEqual(["Ne", "Ne", "Ar"]);
  });
});

describe("crowded lines", () => {
  it("are those with a neighbour that is not negligible", () => {
    const list = own(
      [6000, 6001, 6010, 6010.5, 6020, 6021, 6030],
      [1, 1, 100, 1, 100, 1, 1],
      ["a", "a", "a", "a", "a", "b", "a"],
    );
    expect([...crowdedLines(list, 2)]).toEqual([1, 1, 0, 1, 1, 1, 0]);
    expect([...crowdedLines(list, 0.9)]).toEqual([0, 0, 0, 1, 0, 0, 0]);
  });

  it("count where a strength is unknown", () => {
    expect([...crowdedLines(own([6000, 6001], [Number.NaN, 1], ["", ""]), 2)]).toEqual([1, 1]);
  });
});
