import { beforeAll, describe, expect, it } from "vitest";
import { type Kernels, loadKernels } from "../../../src/kernels/module.js";
import { legendreArgument, legendreValue } from "../../../src/reference/legendre.js";
import { nShapeTerm } from "../../../src/reference/shape.js";
import { columnProfiles, type Lines } from "../../../src/reference/shapeProfiles.js";
import { referToCentroid } from "../../../src/tramlines/shape/centroid.js";
import { analyticLines, analyticTable, trueCentroids } from "./analytic.js";

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

const ny = 90;
const table = analyticTable();
/** Room for what the centroids' terms (P₂ of y(x), x·y, widths) ask of a series in x. */
const lines: Lines = roomy(analyticLines(13, ny), 9);

function roomy(plain: Lines, nTrace: number): Lines {
  const trace = new Float64Array(plain.nFibre * nTrace);
  for (let k = 0; k < plain.nFibre; k++) trace.set(plain.trace.subarray(3 * k, 3 * k + 3), k * nTrace);
  return { ...plain, trace, nTrace };
}

describe("tramlines along the centroid", () => {
  it("know the centroid of every term, from the closed form", () => {
    const { centroid } = referToCentroid(kernels, lines, table).table;
    expect(centroid.length).toBe(nShapeTerm);
    centroid.forEach((value, m) => {
      // The cubic's slopes are exact at the points, and the trapezium rule on a Gaussian of σ ≥ 1 at steps of 1/32 errs by less.
      expect(Math.abs(value - trueCentroids[m])).toBeLessThan(1e-9);
    });
  });

  it("run where the light's mean is, and leave every pixel's weight as it was", () => {
    const moved = referToCentroid(kernels, lines, table);
    let largestMove = 0;
    for (const x of [0, 13, 44, 71, 89]) {
      const before = columnProfiles(lines, table, x, 15);
      const after = columnProfiles(moved.lines, moved.table, x, 15);
      for (let k = 0; k < lines.nFibre; k++) {
        const own = after.weights.subarray(k * after.n, (k + 1) * after.n);
        const mean = own.reduce((sum, weight, i) => sum + weight * (after.first[k] + i), 0);
        largestMove = Math.max(largestMove, Math.abs(after.centre[k] - before.centre[k]));
        expect(Math.abs(mean - after.centre[k])).toBeLessThan(2e-5);
        // Terms in y are taken at the line, which moved by 0.1 px of 90: C changes by 0.1 · 2/89 · 0.06.
        const shift = before.first[k] - after.first[k];
        for (let i = 2; i < before.n - 2; i++) {
          expect(Math.abs(own[i + shift] - before.weights[k * before.n + i])).toBeLessThan(1.5e-4);
        }
      }
    }
    expect(largestMove).toBeGreaterThan(0.08);
  });

  it("do not move again when asked twice", () => {
    const once = referToCentroid(kernels, lines, table);
    const twice = referToCentroid(kernels, once.lines, once.table);
    once.lines.trace.forEach((c, i) => {
      expect(Math.abs(twice.lines.trace[i] - c)).toBeLessThan(1e-12);
    });
    expect([...twice.table.centroid]).toEqual([...once.table.centroid]);
  });

  it("leave the input's lines and table alone", () => {
    const trace = lines.trace.slice();
    referToCentroid(kernels, lines, table);
    expect([...lines.trace]).toEqual([...trace]);
    expect([...table.centroid]).toEqual(new Array(nShapeTerm).fill(0));
  });

  it("move by the centroid's pixels: half as far where a fibre is half as wide", () => {
    const narrow = { ...lines, width: lines.width.map((c) => 0.5 * c) };
    // The first term alone, whose centroid is 0.08 at the reference's width.
    const plain = { ...table, values: table.values.map((value, i) => (i % nShapeTerm === 0 ? value : 0)) };
    const move = (these: Lines) => {
      const { trace } = referToCentroid(kernels, these, plain).lines;
      const t = legendreArgument(20, lines.nx);
      return legendreValue(trace, t, 0, 9) - legendreValue(these.trace, t, 0, 9);
    };
    const width = legendreValue(lines.width, legendreArgument(20, lines.nx), 0, lines.nWidth);
    expect(Math.abs(move(lines) - (0.08 * width) / 1.1)).toBeLessThan(1e-7);
    expect(Math.abs(move(narrow) - (0.04 * width) / 1.1)).toBeLessThan(1e-7);
  });
});
