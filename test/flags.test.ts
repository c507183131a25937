import { describe, expect, it } from "vitest";
import { Flag, MaskBit } from "../src/reference/bits.js";
import { gaussianWeights } from "../src/reference/profile.js";
import { type ColumnsSetup, columnsInput } from "./columns.js";
import { runBoth } from "./runs.js";

const sigma = 1.15;
const calm: ColumnsSetup = {
  nx: 5,
  ny: 60,
  centres: [11.2, 17.9, 45.3],
  sigmas: [sigma, 1.05, 1.25],
  flux: (k, x) => 4000 + 300 * k + 10 * x,
  variance: (y) => 12 + 0.1 * y,
};

/** Distance from the fibre's centre of a pixel that holds `share` of its light. */
function distanceOfShare(share: number): number {
  let [near, far] = [0, 6];
  for (let i = 0; i < 60; i++) {
    const middle = (near + far) / 2;
    if (gaussianWeights(0, sigma, middle, 1)[0] > share) near = middle;
    else far = middle;
  }
  return near;
}

/** Flags of fibre 0 in column 2 when pixel `y` of it carries `bits`, in the mask or among the rejected. */
function flagsWith(centre: number, y: number, bits: number, where: "mask" | "rejected"): [string, number][] {
  const input = columnsInput({ ...calm, centres: [centre, 30.9, 45.3] });
  input[where][y * input.nx + 2] = bits;
  return runBoth(input).map(([name, { flags }]) => [name, flags[2]]);
}

describe("flags", () => {
  it.each([
    ["a cosmic ray", MaskBit.cosmic, "rejected", Flag.cosmicRay],
    ["growth", MaskBit.grown, "rejected", Flag.cosmicRay],
    ["a bad pixel", MaskBit.bad, "mask", Flag.badPixel],
    ["a missing pixel", MaskBit.missing, "mask", Flag.badPixel],
    ["saturation", MaskBit.saturated, "mask", Flag.saturated],
    ["saturation of a bad pixel", MaskBit.saturated | MaskBit.bad, "mask", Flag.saturated | Flag.badPixel],
    ["nothing but suspicion", MaskBit.suspect, "rejected", 0],
  ] as const)("tell of %s from 1 %% of the profile on", (_, bits, where, flag) => {
    for (const [share, expected] of [
      [0.0101, flag],
      [0.0099, 0],
    ] as const) {
      const distance = distanceOfShare(share);
      for (const side of [-1, 1]) {
        for (const [name, found] of flagsWith(20 + side * distance, 20, bits, where)) {
          expect(found, `${name}, share ${share}`).toBe(expected);
        }
      }
    }
  });

  it("tell of a saturated neighbour whose window meets, and of no other", () => {
    const input = columnsInput(calm);
    input.mask[18 * input.nx + 3] = MaskBit.saturated; // fibre 1
    for (const [name, { flags, flux }] of runBoth(input)) {
      for (let x = 0; x < input.nx; x++) {
        const at = (k: number) => flags[k * input.nx + x];
        expect([at(0), at(1), at(2)], name).toEqual(x === 3 ? [Flag.neighbourSaturated, Flag.saturated, 0] : [0, 0, 0]);
      }
      expect(Math.abs(flux[3] - calm.flux(0, 3)), name).toBeLessThan(0.01); // informative: the value stands
    }
  });

  it("give no value where over half of the profile is lost, and a value just below", () => {
    // All rows from 20 up are bad: what is lost is the profile above the edge at 19.5.
    for (const [centre, lost] of [
      [19.51, true],
      [19.49, false],
    ] as const) {
      const input = columnsInput({ ...calm, centres: [centre, 31.9, 45.3] });
      for (let y = 20; y < 27; y++) input.mask[y * input.nx + 1] = MaskBit.bad;
      for (const [name, { flags, flux, variance, chi2, neighbourCovariance }] of runBoth(input)) {
        expect(flags[1], name).toBe(Flag.badPixel | (lost ? Flag.weightLost : 0));
        expect([flux[1], variance[1], chi2[1], neighbourCovariance[1]].map(Number.isNaN), name).toEqual(
          lost ? [true, true, true, true] : [false, false, false, false],
        );
        expect(flags[2], name).toBe(0);
      }
    }
  });

  it("tell where a tramline was not traced, to the column", () => {
    const input = columnsInput(calm);
    input.seen.set([1, 3, 0, 4, 2, 2]);
    for (const [name, { flags }] of runBoth(input)) {
      const e = Flag.extrapolated;
      expect([...flags], name).toEqual([e, 0, 0, 0, e, 0, 0, 0, 0, 0, e, e, 0, e, e]);
    }
  });

  it.each([
    ["below", -0.51, -0.49],
    ["above", 59.51, 59.49],
  ])("give no value %s the detector, from its very edge on", (_, outside, inside) => {
    const setup = (edge: number): ColumnsSetup => ({ ...calm, centres: edge < 0 ? [edge, 17, 45] : [11, 17, edge] });
    for (const centre of [outside, inside]) {
      const input = columnsInput(setup(centre));
      const at = centre < 0 ? 1 : 2 * input.nx + 1;
      for (const [name, { flags, flux, background }] of runBoth(input)) {
        expect(flags[at] & Flag.outside, name).toBe(centre === outside ? Flag.outside : 0);
        expect(Number.isNaN(flux[at]), name).toBe(centre === outside || (flags[at] & Flag.weightLost) !== 0);
        expect(background[at], name).toBe(0);
        expect(flags[input.nx + 1], name).toBe(0);
      }
    }
  });

  it("tell when the last round still moved a flux by more than a tenth of its error", () => {
    const input = columnsInput({
      ...calm,
      flux: (k, x) => 30 + 25 * k + 9 * x + (x > 2 ? 40_000 : 0), // bright light settles at once
      extra: (y, x) => 9 * Math.sin(2.3 * y * y + 1.7 * x),
    });
    const shot = { ...input, noise: { ...input.noise, inverseResponse: new Float32Array(5 * 60).fill(1) } };
    const start = runBoth({ ...shot, minRounds: 0, maxRounds: 0 });
    const once = runBoth({ ...shot, minRounds: 1, maxRounds: 1 });
    const settled = runBoth({ ...shot, minRounds: 8, maxRounds: 8 });
    once.forEach(([name, { flux, variance, flags }], i) => {
      let raised = 0;
      for (let j = 0; j < flux.length; j++) {
        const moved = Math.abs(flux[j] - start[i][1].flux[j]) > 0.1 * Math.sqrt(variance[j]);
        expect(flags[j] & Flag.varianceUnsettled, name).toBe(moved ? Flag.varianceUnsettled : 0);
        raised += moved ? 1 : 0;
        expect(settled[i][1].flags[j], name).toBe(0);
      }
      expect(raised, name).toBeGreaterThan(2);
      expect(raised, name).toBeLessThan(flux.length);
    });
  });
});
