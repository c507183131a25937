import { describe, expect, it } from "vitest";
import { Flag, MaskBit } from "../src/reference/bits.js";
import type { ExtractionInput } from "../src/reference/extract.js";
import { type ColumnsSetup, columnsInput } from "./columns.js";
import { type Result, runBoth } from "./runs.js";

/** σ = 4 e⁻ on every pixel; rows above 45 hold no light at all. */
const calm: ColumnsSetup = {
  ny: 80,
  centres: [12.2, 18.4, 31.7],
  sigmas: [1.1, 1.25, 0.95],
  slope: 0.11,
  flux: (k, x) => 3000 + 900 * k + 130 * x,
  variance: () => 16,
};

function hit(input: ExtractionInput, y: number, x: number, electrons: number): void {
  input.electrons[y * input.nx + x] += electrons;
}

/** Pixels with `bit`, as [y, x]. */
function marked({ rejected }: Result, bit: MaskBit, nx: number): number[][] {
  return Array.from(rejected, (bits, i) => (bits & bit ? [Math.floor(i / nx), i % nx] : [])).filter((p) => p.length);
}

const rejecting = { kappa: 5, growKappa: 2.5 };

describe("cosmic rays", () => {
  it("are found under a fibre's light, taken out and flagged; every other pixel stays", () => {
    const input = columnsInput(calm, rejecting);
    hit(input, 13, 1, 700);
    hit(input, 32, 3, 90);
    for (const [name, result] of runBoth(input)) {
      expect(marked(result, MaskBit.cosmic, input.nx), name).toEqual([
        [13, 1],
        [32, 3],
      ]);
      for (let i = 0; i < result.flux.length; i++) {
        const [k, x] = [Math.floor(i / input.nx), i % input.nx];
        expect(Math.abs(result.flux[i] / calm.flux(k, x) - 1), name).toBeLessThan(2e-6);
        expect(result.flags[i] & Flag.cosmicRay, name).toBe((k === 0 && x === 1) || (k === 2 && x === 3) ? 1 : 0);
      }
    }
  });

  it("begin beyond κ·σ and no earlier, suspects beyond the lower limit", () => {
    const input = columnsInput(calm, rejecting);
    const hits: [number, number][] = [
      [50, 19.99],
      [55, 20.01],
      [60, 9.99],
      [65, 10.01],
    ];
    for (const [y, electrons] of hits) hit(input, y, 2, electrons);
    for (const [name, result] of runBoth(input)) {
      expect(marked(result, MaskBit.cosmic, input.nx), name).toEqual([[55, 2]]);
      expect(marked(result, MaskBit.suspect, input.nx), name).toEqual([
        [50, 2],
        [65, 2],
      ]);
    }
  });

  it("are only what is too bright: dark pixels stay", () => {
    const input = columnsInput(calm, rejecting);
    hit(input, 50, 2, -400);
    for (const [name, result] of runBoth(input)) expect(marked(result, MaskBit.cosmic, input.nx), name).toEqual([]);
  });

  it("are not a sharp bright line that the profile fits to within ε; without ε the line would be eaten", () => {
    // The light is 1.5 % broader than the profile that is fitted, and one column holds 200 times the others' light.
    const line: ColumnsSetup = { ...calm, flux: (k, x) => (x === 2 ? 2e5 : 1000) + 10 * k };
    const broader = columnsInput({ ...line, sigmas: line.sigmas.map((s) => 1.015 * s) }, rejecting);
    const fitted = { ...broader, width: Float64Array.from(line.sigmas) };
    for (const [name, result] of runBoth({ ...fitted, profileError: 0.05 })) {
      expect(marked(result, MaskBit.cosmic, fitted.nx), name).toEqual([]);
    }
    for (const [name, result] of runBoth(fitted)) {
      expect(marked(result, MaskBit.cosmic, fitted.nx).length, name).toBeGreaterThan(3);
    }
    hit(fitted, 18, 2, 60_000); // and ε does not shelter a true hit on the line
    for (const [name, result] of runBoth({ ...fitted, profileError: 0.05 })) {
      expect(marked(result, MaskBit.cosmic, fitted.nx), name).toEqual([[18, 2]]);
    }
  });

  it("go worst first: one of a cluster in a round, all of it in the end", () => {
    const input = columnsInput(calm, rejecting);
    const cluster: [number, number][] = [
      [50, 300],
      [51, 500],
      [52, 400],
      [55, 100],
    ];
    for (const [y, electrons] of cluster) hit(input, y, 3, electrons);
    for (const [name, result] of runBoth({ ...input, minRounds: 1, maxRounds: 1 })) {
      expect(marked(result, MaskBit.cosmic, input.nx), name).toEqual([
        [51, 3],
        [55, 3],
      ]);
    }
    for (const [name, result] of runBoth({ ...input, minRounds: 1, maxRounds: 2 })) {
      expect(
        marked(result, MaskBit.cosmic, input.nx).map(([y]) => y),
        name,
      ).toEqual([51, 52, 55]);
    }
    for (const [name, result] of runBoth(input)) {
      expect(
        marked(result, MaskBit.cosmic, input.nx).map(([y]) => y),
        name,
      ).toEqual([50, 51, 52, 55]);
    }
  });

  it("of equals, the lower row goes first, and rows three apart do not wait for each other", () => {
    const input = columnsInput(calm, { ...rejecting, minRounds: 1, maxRounds: 1 });
    for (const y of [50, 52, 60, 63]) hit(input, y, 1, 256);
    for (const [name, result] of runBoth(input)) {
      expect(
        marked(result, MaskBit.cosmic, input.nx).map(([y]) => y),
        name,
      ).toEqual([50, 60, 63]);
    }
  });

  it("do not save a neighbour: with the hit pixel gone, faint light beside it is right", () => {
    const faint = { ...calm, flux: (k: number, x: number) => (k === 1 ? 40_000 + x : 50) };
    const input = columnsInput(faint, rejecting);
    hit(input, 12, 1, 5000);
    hit(input, 14, 1, 800);
    for (const [name, result] of runBoth(input)) {
      expect(marked(result, MaskBit.cosmic, input.nx), name).toEqual([
        [12, 1],
        [14, 1],
      ]);
      expect(Math.abs(result.flux[1] - 50), name).toBeLessThan(0.1);
      expect(result.variance[1] / result.variance[2], name).toBeGreaterThan(1.5); // and its error bar knows of the loss
    }
  });
});
