import fc from "fast-check";
import { beforeAll, describe, expect, it } from "vitest";
import { type Kernels, loadKernels } from "../src/kernels/module.js";
import { fitShapeColumns } from "../src/kernels/shapeColumn.js";
import { backgroundColumn, nBackground } from "../src/reference/shapeBackground.js";
import { type ColumnData, type ColumnFit, fitColumn, weighColumn } from "../src/reference/shapeColumn.js";
import { columnModel, columnProfiles, wholeProfiles } from "../src/reference/shapeProfiles.js";
import { normalDeviate, seeded } from "./scene.js";
import { analyticLines, analyticTable } from "./tramlines/shape/analytic.js";

const table = analyticTable();
const [ny, x, reach] = [73, 61, 15];

/** Twelve fibres; the first one's window begins below the frame, the last one's ends above it. */
const lines = analyticLines(12, ny);

function worst(found: ArrayLike<number>, wanted: ArrayLike<number>): number {
  expect(found.length).toBe(wanted.length);
  return Math.max(...Array.from(found, (value, i) => Math.abs(value - wanted[i])));
}

describe("variances of a column", () => {
  it("are fixed noise, photons of what light there is, and 0.3 % of it; 1/variance is 0 where a pixel is not good", () => {
    const data = emptyColumn();
    data.fixedVariance.set([9, 9, 9, 16]);
    data.variancePerElectron.set([1, 0.5, 1, 1.25]);
    data.good.fill(1, 0, 4);
    data.good[2] = 0;
    weighColumn(
      data,
      Float64Array.from({ length: ny }, (_, y) => [100, 2e4, 50, -7][y] ?? 0),
    );
    // 9 + 100 + 0.09; 9 + 10000 + 3600; masked; 16 + nothing for less than no light.
    const wanted = [1 / 109.09, 1 / 13609, 0, 1 / 16];
    wanted.forEach((w, y) => {
      expect(data.inverseVariance[y]).toBeCloseTo(w, 15);
    });
  });
});

/** Light of uneven fibres on an uneven background, with noise; some pixels are bad. */
function drawColumn(at: number, seed: number, background: Float64Array, among = lines): ColumnData {
  const next = seeded(seed);
  const profiles = columnProfiles(among, table, at, reach);
  const flux = Float64Array.from({ length: among.nFibre }, () => 30 * 4000 ** next());
  const under = backgroundColumn(background, at, among);
  const expected = columnModel(profiles, flux).map((light, y) => light + under[y]);
  const fixedVariance = expected.map((_, y) => 7 + (y % 4));
  const good = Uint8Array.from(expected, () => (next() < 0.1 ? 0 : 1));
  return {
    x: at,
    light: expected.map((light, y) => (light + Math.sqrt(light + fixedVariance[y]) * normalDeviate(next)) * good[y]),
    good,
    fixedVariance,
    variancePerElectron: expected.map(() => 0.8 + 0.5 * next()),
    inverseVariance: expected.map(() => 0),
  };
}

describe("columns fitted by the kernel", () => {
  let kernels: Kernels;
  beforeAll(async () => {
    kernels = await loadKernels();
  });

  const told = { ...table, centroid: Float64Array.of(0.11, -0.03, 0.02, 0.05, -0.07, 0.01, 0.04) };

  /** Rounding of sums of up to 30 products, times what the systems' condition makes of it: 1e-10 of the largest leaves
   * room for a condition of 1e5, and a wrong row, lane or sign shows at 1e-3 and above. */
  function expectClose(found: ArrayLike<number>, wanted: ArrayLike<number>, share = 1e-10): void {
    const largest = Math.max(...Array.from(wanted, Math.abs));
    expect(worst(found, wanted)).toBeLessThan(share * largest);
  }

  it("are the reference's, one or many of them, bad pixels and windows off the frame included", () => {
    const columnsDrawn = fc.array(fc.integer({ min: 0, max: 89 }), { minLength: 1, maxLength: 5 });
    fc.assert(
      fc.property(columnsDrawn, fc.integer({ min: 1, max: 3 }), fc.integer({ min: 1, max: 1e6 }), (xs, nPar, seed) => {
        const background = Float64Array.from({ length: nBackground }, (_, i) =>
          i === 0 ? 25 : 2 * Math.sin(seed + i),
        );
        const columns = xs.map((at, i) => drawColumn(at, seed + i, background));
        const found = fitShapeColumns(kernels, { lines, table: told, background, columns, nPar });
        expect(found.map((fit) => fit.x)).toEqual(xs);
        columns.forEach((data, i) => {
          const profiles = wholeProfiles(lines, told, data.x);
          const wanted = fitColumn(profiles, data, backgroundColumn(background, data.x, lines), nPar);
          expectClose(found[i].flux, wanted.flux);
          expectClose(found[i].model, wanted.model);
          expectClose(found[i].inverseVariance, wanted.inverseVariance);
          for (let p = 0; p < nPar; p++) {
            const pick = (from: Float64Array) => from.filter((_, j) => j % nPar === p);
            // Solutions are small beside what they are the sum of: they are counted in errors.
            const inErrors = ({ solution, variance }: ColumnFit) =>
              pick(solution.map((v, j) => v / Math.sqrt(variance[j])));
            expect(worst(inErrors(found[i]), inErrors(wanted))).toBeLessThan(1e-7);
            expectClose(pick(found[i].variance), pick(wanted.variance), 1e-9);
          }
        });
      }),
      { numRuns: 40 },
    );
  });

  it("say nothing of a fibre without a good pixel, and of its column's other fibres what the reference says", () => {
    // The last one stands alone: its neighbour would have the far end of its wing left.
    const apart = { ...lines, ny: 130, trace: lines.trace.map((c, i) => (i === 33 ? c + 40 : c)) };
    const background = new Float64Array(nBackground);
    const columns = [12, 13, 70].map((at) => drawColumn(at, at, background, apart));
    columns[1].good.fill(0, 80);
    columns[1].light.fill(0, 80);
    const found = fitShapeColumns(kernels, { lines: apart, table, background, columns, nPar: 3 });
    expect(found[0].flux[11]).not.toBe(0);
    expect(found[1].flux[11]).toBe(0);
    expect([...found[1].variance.subarray(33, 36)]).toEqual([0, 0, 0]);
    const wanted = fitColumn(wholeProfiles(apart, table, 13), columns[1], new Float64Array(130), 3);
    expectClose(found[1].flux, wanted.flux);
    expectClose(found[1].variance, wanted.variance, 1e-9);
  });

  it("are the reference's along a slit of many fibres", () => {
    const slit = analyticLines(90, 490);
    const background = new Float64Array(nBackground).fill(3, 0, 1);
    const columns = [20, 41, 66].map((at) => drawColumn(at, at, background, slit));
    const found = fitShapeColumns(kernels, { lines: slit, table, background, columns, nPar: 3 });
    columns.forEach((data, i) => {
      const under = backgroundColumn(background, data.x, slit);
      const wanted = fitColumn(wholeProfiles(slit, table, data.x), data, under, 3);
      expectClose(found[i].flux, wanted.flux);
      expectClose(found[i].variance, wanted.variance, 1e-9);
    });
  });

  it("do not depend on which columns are fitted with them, to the bit", () => {
    const background = Float64Array.from({ length: nBackground }, (_, i) => 3 - i / 9);
    const columns = [8, 33, 34, 77, 61].map((at) => drawColumn(at, at, background));
    const together = fitShapeColumns(kernels, { lines, table, background, columns, nPar: 2 });
    columns.forEach((column, i) => {
      const [alone] = fitShapeColumns(kernels, { lines, table, background, columns: [column], nPar: 2 });
      expect([...alone.flux]).toEqual([...together[i].flux]);
      expect([...alone.solution]).toEqual([...together[i].solution]);
    });
  });
});

function emptyColumn(): ColumnData {
  const zeros = () => new Float64Array(ny);
  return {
    x,
    light: zeros(),
    good: new Uint8Array(ny),
    fixedVariance: zeros(),
    variancePerElectron: zeros(),
    inverseVariance: zeros(),
  };
}
