import { describe, expect, it } from "vitest";
import { legendreArgument } from "../src/reference/legendre.js";
import { shapeTerms, shapeWeights } from "../src/reference/shape.js";
import { type ColumnProfiles, columnModel, columnProfiles } from "../src/reference/shapeProfiles.js";
import { analyticLines, analyticTable } from "./tramlines/shape/analytic.js";

const table = analyticTable();
const [ny, x, reach] = [73, 61, 15];

/** Twelve fibres; the first one's window begins below the frame, the last one's ends above it. */
const lines = analyticLines(12, ny);
const fluxes = Float64Array.from({ length: 12 }, (_, k) => 40 * 9 ** Math.abs(2 * Math.sin(2.1 * k)));

function weightsAt(profiles: ColumnProfiles, k: number, byCentre: number, byWidth: number): Float64Array {
  const { centre, width, terms, first, n } = profiles;
  return shapeWeights(table, terms[k], centre[k] + byCentre, width[k] + byWidth, first[k], n);
}

function worst(found: ArrayLike<number>, wanted: ArrayLike<number>): number {
  expect(found.length).toBe(wanted.length);
  return Math.max(...Array.from(found, (value, i) => Math.abs(value - wanted[i])));
}

describe("profiles in a column", () => {
  const profiles = columnProfiles(lines, table, x, reach);

  it("are the shape's weights at each fibre's centre, width and place", () => {
    for (let k = 0; k < lines.nFibre; k++) {
      const y = profiles.centre[k];
      const t = legendreArgument(x, lines.nx);
      const terms = shapeTerms(t, legendreArgument(y, ny), profiles.width[k], table.referenceWidth);
      const wanted = shapeWeights(table, terms, y, profiles.width[k], profiles.first[k], profiles.n);
      expect(worst(profiles.weights.subarray(k * profiles.n, (k + 1) * profiles.n), wanted)).toBe(0);
      expect(Math.abs(profiles.first[k] + 15 - y)).toBeLessThanOrEqual(0.5);
    }
    expect(profiles.first[0]).toBeLessThan(0);
    expect(profiles.first[11] + profiles.n).toBeGreaterThan(ny);
  });

  it("have the slopes that differences show, by centre and by width, with the centroid told or not", () => {
    for (const centroid of [table.centroid, Float64Array.of(0.11, -0.03, 0.02, 0.05, -0.07, 0.01, 0.04)]) {
      const shape = { ...table, centroid };
      const these = columnProfiles(lines, shape, x, reach);
      const h = 1e-4; // error h²/6 · |P‴| = 2e-9 and rounding 1e-16/h = 1e-12
      for (let k = 0; k < lines.nFibre; k++) {
        const difference = (a: Float64Array, b: Float64Array) => a.map((value, i) => (value - b[i]) / (2 * h));
        const at = (c: number, w: number) =>
          shapeWeights(shape, these.terms[k], these.centre[k] + c, these.width[k] + w, these.first[k], these.n);
        const own = (slopes: Float64Array) => slopes.subarray(k * these.n, (k + 1) * these.n);
        expect(worst(own(these.byCentre), difference(at(h, 0), at(-h, 0)))).toBeLessThan(1e-7);
        expect(worst(own(these.byWidth), difference(at(0, h), at(0, -h)))).toBeLessThan(1e-7);
        expect(Math.max(...own(these.byCentre))).toBeGreaterThan(0.1);
        expect(Math.max(...own(these.byWidth))).toBeGreaterThan(0.02);
      }
    }
  });

  it("put flux on the frame's rows and nothing elsewhere", () => {
    const model = columnModel(profiles, fluxes);
    const wanted = new Float64Array(ny);
    for (let k = 0; k < 12; k++) {
      weightsAt(profiles, k, 0, 0).forEach((weight, i) => {
        const y = profiles.first[k] + i;
        if (y >= 0 && y < ny) wanted[y] += fluxes[k] * weight;
      });
    }
    expect(worst(model, wanted)).toBeLessThan(1e-9);
  });
});
