import fc from "fast-check";
import { beforeAll, describe, expect, it } from "vitest";
import { type Kernels, loadKernels } from "../src/kernels/module.js";
import { fitShapeColumns } from "../src/kernels/shapeColumn.js";
import { factorBand, solveBand } from "../src/reference/banded.js";
import { backgroundColumn, nBackground } from "../src/reference/shapeBackground.js";
import {
  type ColumnData,
  type ColumnFit,
  columnFlux,
  fitColumn,
  localDesign,
  localSystem,
  weighColumn,
} from "../src/reference/shapeColumn.js";
import {
  type ColumnProfiles,
  columnModel,
  columnProfiles,
  type Lines,
  wholeProfiles,
} from "../src/reference/shapeProfiles.js";
import { normalDeviate, seeded } from "./scene.js";
import { analyticLines, analyticTable } from "./tramlines/shape/analytic.js";

const table = analyticTable();
const [ny, x, reach] = [73, 61, 15];

/** Twelve fibres; the first one's window begins below the frame, the last one's ends above it. */
const lines = analyticLines(12, ny);
const fluxes = Float64Array.from({ length: 12 }, (_, k) => 40 * 9 ** Math.abs(2 * Math.sin(2.1 * k)));

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

describe("local unknowns", () => {
  const next = seeded(31);
  const inverseVariance = Float64Array.from({ length: ny }, (_, y) => (y % 11 === 4 ? 0 : 0.1 + next()));
  const residual = Float64Array.from({ length: ny }, () => next() - 0.4);

  for (const [nPar, localReach] of [
    [1, 15],
    [2, 15],
    [3, 15],
    [3, 9],
  ] as const) {
    it(`${nPar} a fibre within ${localReach} px have the normal equations of the dense design`, () => {
      const profiles = columnProfiles(lines, table, x, reach, localReach);
      const { band, rhs, halfBandwidth } = localSystem(
        profiles,
        localDesign(profiles, fluxes, nPar),
        residual,
        inverseVariance,
        nPar,
      );
      const dense = denseDesign(profiles, nPar, localReach);
      const product = (a: Float64Array, b: Float64Array) =>
        a.reduce((sum, value, y) => sum + value * inverseVariance[y] * b[y], 0);
      let beyondBand = 0;
      for (let i = 0; i < dense.length; i++) {
        const scale = Math.sqrt(product(dense[i], dense[i]) * product(residual, residual));
        expect(Math.abs(rhs[i] - product(dense[i], residual))).toBeLessThan(1e-13 * scale);
        for (let j = 0; j <= i; j++) {
          const wanted = product(dense[i], dense[j]);
          const size = Math.sqrt(product(dense[i], dense[i]) * product(dense[j], dense[j]));
          if (i - j > halfBandwidth) beyondBand = Math.max(beyondBand, Math.abs(wanted) / size);
          else {
            expect(Math.abs(band[i * (halfBandwidth + 1) + i - j] - wanted)).toBeLessThan(1e-13 * size);
          }
        }
      }
      expect(beyondBand).toBe(0);
    });
  }

  function denseDesign(profiles: ColumnProfiles, nPar: number, localReach: number): Float64Array[] {
    const { n, first, centre } = profiles;
    return Array.from({ length: 12 * nPar }, (_, i) => {
      const [k, p] = [Math.floor(i / nPar), i % nPar];
      const source = [profiles.weights, profiles.byCentre, profiles.byWidth][p];
      return Float64Array.from({ length: ny }, (_, y) => {
        if (Math.abs(y - Math.floor(centre[k] + 0.5)) > localReach) return 0;
        return source[k * n + y - first[k]] * (p === 0 ? 1 : fluxes[k]);
      });
    });
  }

  it("let flux, shift and width be found exactly in light without noise, in a few turns", () => {
    // A shape without terms: with them a change of place or width changes the form a little, and turns take longer.
    const plain = { ...table, values: table.values.map((value, i) => (i % 7 === 0 ? value : 0)) };
    const profiles = columnProfiles(lines, plain, x, reach);
    const light = columnModel(profiles, fluxes);
    let moved: Lines = {
      ...lines,
      trace: lines.trace.map((c, i) => (i % 3 === 0 ? c + 0.2 * Math.sin(7 * i + 1) : c)),
      width: lines.width.map((c, i) => (i % 2 === 0 ? c * (1 + 0.04 * Math.cos(5 * i)) : c)),
    };
    const ones = new Float64Array(ny).fill(1);
    let found = new Float64Array(12);
    for (let turn = 0; turn < 8; turn++) {
      const these = columnProfiles(moved, plain, x, reach);
      const flux = columnFlux(these, light, ones);
      const left = light.map((value, y) => value - columnModel(these, flux)[y]);
      const { band, rhs, halfBandwidth } = localSystem(these, localDesign(these, flux, 3), left, ones, 3);
      factorBand(band, rhs.length, halfBandwidth);
      solveBand(band, rhs.length, halfBandwidth, rhs);
      found = Float64Array.from(flux, (f, k) => f + rhs[3 * k]);
      moved = {
        ...moved,
        trace: moved.trace.map((c, i) => (i % 3 === 0 ? c + rhs[i + 1] : c)),
        width: moved.width.map((c, i) => (i % 2 === 0 ? c + rhs[3 * (i / 2) + 2] : c)),
      };
    }
    expect(worst(moved.trace, lines.trace)).toBeLessThan(1e-9);
    expect(worst(moved.width, lines.width)).toBeLessThan(1e-9);
    expect(Math.max(...found.map((f, k) => Math.abs(f / fluxes[k] - 1)))).toBeLessThan(1e-9);
  });

  it("leave a fibre's flux 0 when none of its pixels is good, and its neighbours' as they are", () => {
    const profiles = columnProfiles(lines, table, x, 4);
    const light = columnModel(profiles, fluxes);
    const ones = new Float64Array(ny).fill(1);
    const centre = Math.round(profiles.centre[5]);
    const whole = columnFlux(profiles, light, ones);
    ones.fill(0, centre - 4, centre + 5);
    const left = columnFlux(profiles, light, ones);
    expect(left[5]).toBe(0);
    for (const k of [0, 3, 4, 6, 7, 11]) {
      expect(Math.abs(whole[k] / fluxes[k] - 1)).toBeLessThan(1e-10);
      expect(Math.abs(left[k] / fluxes[k] - 1)).toBeLessThan(1e-10);
    }
  });
});

/** Light of uneven fibres on an uneven background, with noise; some pixels are bad. */
function drawColumn(at: number, seed: number, background: Float64Array, among = lines): ColumnData {
  const next = seeded(seed);
  const profiles = columnProfiles(among, table, at, reach);
  const flux = Float64Array.from({ length: 12 }, () => 30 * 4000 ** next());
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
