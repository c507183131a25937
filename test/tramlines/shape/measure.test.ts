import { beforeAll, describe, expect, it } from "vitest";
import { loadKernels } from "../../../src/kernels/module.js";
import { legendreArgument, legendreValue } from "../../../src/reference/legendre.js";
import { nShapeTerm } from "../../../src/reference/shape.js";
import { columnProfiles } from "../../../src/reference/shapeProfiles.js";
import { scoreTrace } from "../../../src/report/truth.js";
import { combineFlats } from "../../../src/tramlines/flat.js";
import { flatColumns } from "../../../src/tramlines/shape/measure.js";
import { frameOf, type MeasuredBench, measuredBench, weightErrors } from "./bench.js";

let bench: MeasuredBench;
beforeAll(async () => {
  bench = measuredBench(await loadKernels());
});

describe("a profile measured from the flat, against the true one", () => {
  it("has each pixel's weight to 6e-4 rms and 4e-3 at the worst, and the wings' to 1e-4", () => {
    const { measured, flats, active } = bench;
    const { core, wing, wingLight } = weightErrors(measured, flats[0].truth, active);
    // Noise of a pixel of 12 000 e⁻ in two flats of 30 000 e⁻ a fibre is 0.0026 of the fibre; some 300 numbers from 40
    // columns of 170 rows leave √(300/6800) of that, 5e-4.
    expect(core.rms).toBeLessThan(6e-4);
    expect(core.worst).toBeLessThan(4e-3);
    expect(wing.rms).toBeLessThan(1e-4);
    expect(wing.worst).toBeLessThan(5e-4);
    expect(Math.abs(wingLight)).toBeLessThan(1e-3);
  });

  it("is no Gaussian, nor was the truth: one of the same lines and widths misses by eight times as much", () => {
    const { measured, flats, active } = bench;
    const gaussian = bareCore(measured.table);
    const { core } = weightErrors({ lines: measured.lines, table: gaussian }, flats[0].truth, active);
    expect(core.rms).toBeGreaterThan(8 * weightErrors(measured, flats[0].truth, active).core.rms);
  });

  it("puts tramlines on the centroid of the whole profile: 0.0025 px rms but for an offset that all have in common", () => {
    const { measured, flats, active } = bench;
    const { truth } = flats[0];
    const { lines } = measured;
    const rows = active.map((_, i) =>
      columnsOf(truth.nx, (t) => legendreValue(lines.trace, t, i * lines.nTrace, lines.nTrace)),
    );
    const wanted = active.map((k) => truth.trace.subarray(k * truth.nx, (k + 1) * truth.nx));
    const score = scoreTrace(
      rows.flatMap((row) => [...row]),
      wanted.flatMap((row) => [...row]),
      active.map(() => true),
      5.1,
    );
    // The whole wings' light is known to some 5e-4 of a fibre (above); as much of it on one side, 10 px away, moves the centroid
    // of all fibres by 0.005 px: other seeds gave −0.004, 0.0005 and 0.005 px.
    expect(score.rms).toBeLessThan(0.0025);
    expect(score.worstRms).toBeLessThan(0.006);
    expect(Math.abs(score.offset)).toBeLessThan(0.012);
  });

  it("holds all the light of a fibre, everywhere on the frame", () => {
    const { lines, table } = bench.measured;
    for (const x of [0, 77, 151, 298]) {
      const { weights, n, nFibre } = columnProfiles(lines, table, x, 26);
      for (let k = 0; k < nFibre; k++) {
        const sum = weights.subarray(k * n, (k + 1) * n).reduce((total, weight) => total + weight, 0);
        expect(Math.abs(sum - 1)).toBeLessThan(1e-10);
      }
    }
  });

  it("tells the scattered light apart from the wings, to a tenth of it", () => {
    const { measured, flats } = bench;
    const { scattered, nx, ny } = flats[0].truth;
    let [worst, most] = [0, 0];
    for (let x = 5; x < nx; x += 29) {
      for (let y = 5; y < ny; y += 17) {
        most = Math.max(most, scattered[y * nx + x]);
        worst = Math.max(worst, Math.abs(surfaceAt(measured.state.background, x, y, nx, ny) - scattered[y * nx + x]));
      }
    }
    expect(most).toBeGreaterThan(80);
    expect(worst).toBeLessThan(0.1 * most);
  });

  it("settles: the last round's χ² is the one before's to 4 %", () => {
    const { history } = bench.measured;
    expect(history[0]).toBeGreaterThan(100);
    expect(Math.abs(history[history.length - 1] / history[history.length - 2] - 1)).toBeLessThan(0.04);
  });

  it("remembers what the flat said of it: as much information as coefficients, positive on the diagonal", () => {
    const { best, information } = bench.measured.known;
    expect(best).toBe(bench.measured.state.coefficients);
    expect(information.length).toBe(best.length ** 2);
    for (let i = 0; i < best.length; i++) expect(information[i * best.length + i]).toBeGreaterThanOrEqual(0);
    // The middle spline's weight is known to 1 % of itself at the least.
    const middle = Math.floor(best.length / nShapeTerm / 2) * nShapeTerm;
    expect(1 / Math.sqrt(information[middle * best.length + middle])).toBeLessThan(0.01 * best[middle]);
  });
});

describe("a flat's column", () => {
  it("has its pixels' variances divided by the frames in the mean, and leaves bad pixels out", () => {
    const frames = bench.flats.map(frameOf);
    for (const frame of frames) frame.mask[40 * 300 + 7] = 1;
    frames[0].electrons[41 * 300 + 7] = Number.NaN;
    const [other, column] = flatColumns(combineFlats(frames), [4, 7]);
    expect(other.good[40]).toBe(1);
    expect(column.good[40]).toBe(0);
    expect(column.light[40]).toBe(0);
    expect(column.good[41]).toBe(1);
    expect(column.fixedVariance[41]).toBeCloseTo(3.1 ** 2, 4);
    expect(column.fixedVariance[42]).toBeCloseTo(3.1 ** 2 / 2, 4);
    expect(column.variancePerElectron[42]).toBe(0.5);
  });
});

function columnsOf(nx: number, value: (t: number) => number): Float64Array {
  return Float64Array.from({ length: nx }, (_, x) => value(legendreArgument(x, nx)));
}

/** A Gaussian of the reference's width as a table. */
function bareCore(table: MeasuredBench["measured"]["table"]) {
  const values = new Float64Array(table.values.length);
  let sum = 0;
  for (let i = 0; i < table.n; i++) {
    const v = (table.start + i * table.step) / table.referenceWidth;
    const density = Math.exp(-0.5 * v * v) / Math.sqrt(2 * Math.PI) / table.referenceWidth;
    values[i * 2 * nShapeTerm] = sum + 0.5 * density * table.step;
    values[i * 2 * nShapeTerm + nShapeTerm] = density;
    sum += density * table.step;
  }
  return { ...table, values, centroid: new Float64Array(nShapeTerm) };
}

/** Σ b_ij P_i(x) P_j(y), 3 × 5. */
function surfaceAt(b: Float64Array, x: number, y: number, nx: number, ny: number): number {
  const [u, v] = [legendreArgument(x, nx), legendreArgument(y, ny)];
  return [1, u, 1.5 * u * u - 0.5].reduce((sum, p, i) => sum + p * legendreValue(b, v, 5 * i, 5), 0);
}
