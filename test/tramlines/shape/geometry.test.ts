import { beforeAll, describe, expect, it } from "vitest";
import { type Kernels, loadKernels } from "../../../src/kernels/module.js";
import { legendreArgument, legendreValue } from "../../../src/reference/legendre.js";
import { nBackground } from "../../../src/reference/shapeBackground.js";
import type { ColumnData } from "../../../src/reference/shapeColumn.js";
import { columnModel, columnProfiles, type Lines } from "../../../src/reference/shapeProfiles.js";
import { applyGeometry, type LocalGeometry, measureColumns } from "../../../src/tramlines/shape/geometry.js";
import { normalDeviate, seeded } from "../../scene.js";
import { analyticLines, analyticTable } from "./analytic.js";

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

const ny = 100;
const nFibre = 13;
const table = analyticTable();
const truth = analyticLines(nFibre, ny, 5.6, 14);
const background = new Float64Array(nBackground);
background[0] = 20;

function drawColumn(x: number, seed: number, brightness: (k: number) => number): ColumnData {
  const next = seeded(seed);
  const profiles = columnProfiles(truth, table, x, 15);
  const model = columnModel(
    profiles,
    Float64Array.from({ length: nFibre }, (_, k) => brightness(k)),
  );
  return {
    x,
    light: model.map((light) => 20 + light + Math.sqrt(20 + light + 9) * normalDeviate(next)),
    good: new Uint8Array(ny).fill(1),
    fixedVariance: new Float64Array(ny).fill(9),
    variancePerElectron: new Float64Array(ny).fill(1),
    inverseVariance: new Float64Array(ny),
  };
}

/** Lines that are off by known amounts, small enough for a linear fit to be exact to a tenth of its errors. */
const offShift = (k: number) => 0.012 * Math.sin(3 * k + 1);
const offWidth = (k: number) => 0.006 * Math.cos(2 * k);
const off: Lines = {
  ...truth,
  trace: truth.trace.map((c, i) => (i % 3 === 0 ? c - offShift(i / 3) : c)),
  width: truth.width.map((c, i) => (i % 2 === 0 ? c - offWidth(i / 2) : c)),
};

describe("one column's geometry", () => {
  const seen: { pulls: number[]; fluxPulls: number[] } = { pulls: [], fluxPulls: [] };
  const pulls = { shift: [] as number[], widening: [] as number[] };
  const errors = { shift: [] as number[], widening: [] as number[] };

  beforeAll(() => {
    const brightness = (i: number) => (k: number) => 4000 * (1 + 0.5 * Math.sin(2 * k + i));
    const drawn = Array.from({ length: 160 }, (_, i) => drawColumn(i % 90, 500 + i, brightness(i)));
    measureColumns(kernels, off, table, background, drawn).forEach((found, i) => {
      for (let k = 0; k < nFibre; k++) {
        pulls.shift.push((found.shift[k] - offShift(k)) / Math.sqrt(found.shiftVariance[k]));
        pulls.widening.push((found.widening[k] - offWidth(k)) / Math.sqrt(found.wideningVariance[k]));
        errors.shift.push(Math.sqrt(found.shiftVariance[k]));
        errors.widening.push(Math.sqrt(found.wideningVariance[k]));
        seen.fluxPulls.push(found.flux[k] / brightness(i)(k) - 1);
      }
    });
  });

  const mean = (values: number[]) => values.reduce((sum, value) => sum + value, 0) / values.length;
  const deviation = (values: number[]) => Math.sqrt(mean(values.map((value) => (value - mean(values)) ** 2)));

  for (const name of ["shift", "widening"] as const) {
    it(`finds the ${name} of every fibre within its quoted error`, () => {
      // 2080 pulls: their standard deviation is known to 1/√4160 = 1.6 %; modelError, which this light does not have, widens
      // the quoted errors by √(1 + 0.003²·1500) = 0.7 % at the brightest pixels.
      expect(Math.abs(deviation(pulls[name]) - 1)).toBeLessThan(0.065);
      expect(Math.abs(mean(pulls[name]))).toBeLessThan(4 / Math.sqrt(2080) + 0.03);
    });
  }

  it("quotes the errors of theory: σ/√N for a shift, and what a width is known to", () => {
    // A Gaussian of N photons has its centre known to σ/√N and its width to σ/√(2N) (Cramér–Rao); pixels, neighbours,
    // background and wings add to that.
    const bound = 1.2 / Math.sqrt(4000);
    expect(mean(errors.shift)).toBeGreaterThan(bound);
    expect(mean(errors.shift)).toBeLessThan(2 * bound);
    expect(mean(errors.widening)).toBeGreaterThan(bound / Math.SQRT2);
    expect(mean(errors.widening)).toBeLessThan(2.5 * bound);
  });

  it("keeps fluxes unbiased", () => {
    expect(Math.abs(mean(seen.fluxPulls))).toBeLessThan(0.002);
  });

  it("says nothing of a fibre without good pixels: variance 0", () => {
    const data = drawColumn(40, 3, () => 5000);
    const profiles = columnProfiles(truth, table, 40, 15);
    data.good.fill(0, profiles.first[6], profiles.first[6] + profiles.n);
    const [found] = measureColumns(kernels, off, table, background, [data]);
    expect(found.shiftVariance[6]).toBe(0);
    expect(found.wideningVariance[6]).toBe(0);
    expect(found.shiftVariance[0]).toBeGreaterThan(0);
  });
});

describe("the series follow the columns", () => {
  const wantedShift = (k: number, t: number) => 0.03 * Math.sin(k) - 0.05 * t + 0.02 * (1.5 * t * t - 0.5);
  const wantedWidening = (k: number, t: number) => 0.01 * Math.cos(k) + 0.02 * t;

  /** 40 columns that tell the wanted geometry, with noise of the quoted variance. */
  function toldColumns(): LocalGeometry[] {
    const next = seeded(17);
    return Array.from({ length: 40 }, (_, i) => {
      const x = 1 + Math.floor((i * 89) / 40);
      const t = legendreArgument(x, truth.nx);
      const each = (value: (k: number) => number) => Float64Array.from({ length: nFibre }, (_, k) => value(k));
      return {
        x,
        flux: each(() => 1),
        shift: each((k) => wantedShift(k, t) + 0.004 * normalDeviate(next)),
        shiftVariance: each(() => 0.004 ** 2),
        widening: each((k) => wantedWidening(k, t) + 0.004 * normalDeviate(next)),
        wideningVariance: each(() => 0.004 ** 2),
      };
    });
  }

  function worstDeparture(columns: LocalGeometry[]): { trace: number; width: number; lines: Lines } {
    const lines = { ...truth, trace: truth.trace.slice(), width: truth.width.slice() };
    applyGeometry(kernels, lines, columns, 1.02);
    const departure = { trace: 0, width: 0, lines };
    for (let k = 0; k < nFibre; k++) {
      for (const x of [0, 30, 60, 89]) {
        const t = legendreArgument(x, truth.nx);
        const moved = legendreValue(lines.trace, t, 3 * k, 3) - legendreValue(truth.trace, t, 3 * k, 3);
        const widened = legendreValue(lines.width, t, 2 * k, 2) - legendreValue(truth.width, t, 2 * k, 2);
        departure.trace = Math.max(departure.trace, Math.abs(moved - wantedShift(k, t)));
        departure.width = Math.max(departure.width, Math.abs(widened - wantedWidening(k, t)));
      }
    }
    return departure;
  }

  // A series of 3 through 40 points of 0.0045 px is known to 0.0045·√(9/40) = 0.0021 px at the ends; the worst of 52 lies 3 σ off.
  it("to what their errors allow", () => {
    const { trace, width } = worstDeparture(toldColumns());
    expect(trace).toBeLessThan(0.007);
    expect(width).toBeLessThan(0.006);
  });

  it("past columns that are wild, and columns that cannot tell", () => {
    const columns = toldColumns();
    columns[7].shift.fill(3);
    columns[8].widening.fill(-1);
    columns[21].shift.fill(50);
    columns[21].shiftVariance.fill(0); // no good pixel: weight 0, not infinite
    const { trace, width } = worstDeparture(columns);
    expect(trace).toBeLessThan(0.007);
    expect(width).toBeLessThan(0.006);
  });

  it("with faint columns counting less", () => {
    const columns = toldColumns();
    columns.forEach((column, i) => {
      if (i % 2 === 0) return;
      column.shift.forEach((s, k) => {
        column.shift[k] = s + (i % 4 === 1 ? 0.1 : -0.07);
      });
      column.shiftVariance.fill(0.1 ** 2);
    });
    expect(worstDeparture(columns).trace).toBeLessThan(0.012);
  });

  it("not at all for a fibre that no column tells of", () => {
    const columns = toldColumns();
    for (const column of columns) {
      column.shiftVariance[4] = 0;
      column.wideningVariance[4] = 0;
    }
    const { lines } = worstDeparture(columns);
    expect([...lines.trace.subarray(12, 15)]).toEqual([...truth.trace.subarray(12, 15)]);
    expect([...lines.width.subarray(8, 10)]).toEqual([...truth.width.subarray(8, 10)]);
  });
});
