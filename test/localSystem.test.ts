import { describe, expect, it } from "vitest";
import { factorBand, solveBand } from "../src/reference/banded.js";
import { localDesign, localSystem } from "../src/reference/localSystem.js";
import { columnFlux } from "../src/reference/shapeColumn.js";
import { type ColumnProfiles, columnModel, columnProfiles, type Lines } from "../src/reference/shapeProfiles.js";
import { seeded } from "./scene.js";
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
