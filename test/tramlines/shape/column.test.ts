import { describe, expect, it } from "vitest";
import { factorBand, solveBand } from "../../../src/reference/banded.js";
import { legendreArgument } from "../../../src/reference/legendre.js";
import { shapeTerms, shapeWeights } from "../../../src/reference/shape.js";
import {
  type ColumnData,
  type ColumnProfiles,
  columnFlux,
  columnModel,
  columnProfiles,
  type Lines,
  localDesign,
  localSystem,
  weighColumn,
} from "../../../src/tramlines/shape/column.js";
import { seeded } from "../../scene.js";
import { analyticLines, analyticTable } from "./analytic.js";

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
