import { beforeAll, describe, expect, it } from "vitest";
import type { Frame } from "../../../src/detector/frame.js";
import { noBackground } from "../../../src/extraction/background.js";
import { type Kernels, loadKernels } from "../../../src/kernels/module.js";
import { MaskBit } from "../../../src/reference/bits.js";
import type { SmoothBackground } from "../../../src/reference/extract.js";
import { legendreBasis } from "../../../src/reference/legendre.js";
import type { ShapeTable } from "../../../src/reference/shape.js";
import { type SimulatedExposure, simulateExposure } from "../../../src/simulate/exposure.js";
import { frameColumn, refineShape, widenBackground } from "../../../src/tramlines/shape/refine.js";
import { benchScene, frameOf, type MeasuredBench, measuredBench, weightErrors } from "./bench.js";

let kernels: Kernels;
let bench: MeasuredBench;
beforeAll(async () => {
  kernels = await loadKernels();
  bench = measuredBench(kernels);
});

/** A science frame of the bench with some lines of the scene changed: 28 fibres from 10 to 1e5 e⁻ a column. */
function science(from: string | RegExp, to: string): SimulatedExposure {
  return simulateExposure(
    benchScene((text) => text.replace(from, to)),
    "sci_01",
  );
}

/** Refined on the frame whose cosmic rays are known and whose scattered light is left for the fit to find. */
function refineOn(exposure: SimulatedExposure, frame = frameOf(exposure), background = noBackground()): ShapeTable {
  const { truth } = exposure;
  const rejected = Uint8Array.from(truth.cosmicRays, (electrons) => (electrons > 0 ? MaskBit.cosmic : 0));
  const { known, table, lines } = bench.measured;
  return refineShape(kernels, known, table, lines, frame, background, rejected);
}

function errorsOf(table: ShapeTable, exposure: SimulatedExposure) {
  return weightErrors({ lines: bench.measured.lines, table }, exposure.truth, bench.active);
}

describe("a profile refined on a science frame", () => {
  it("that has the flat's own profile comes nearer to it: half again as many photons", () => {
    const exposure = simulateExposure(bench.scene, "sci_01");
    const before = errorsOf(bench.measured.table, exposure);
    const after = errorsOf(refineOn(exposure), exposure);
    expect(after.core.rms).toBeLessThan(before.core.rms);
    expect(after.wing.rms).toBeLessThan(1.2 * before.wing.rms);
  });

  it("with more light in its wings halves the error that the flat's profile makes there", () => {
    const exposure = science("wing_share = 0.02", "wing_share = 0.035");
    const before = errorsOf(bench.measured.table, exposure);
    const after = errorsOf(refineOn(exposure), exposure);
    expect(before.wing.rms).toBeGreaterThan(2e-4);
    expect(after.wing.rms).toBeLessThan(0.5 * before.wing.rms);
    expect(after.core.rms).toBeLessThan(0.5 * before.core.rms);
    expect(Math.abs(after.wingLight)).toBeLessThan(0.4 * Math.abs(before.wingLight));
  });

  it("of another skew follows it", () => {
    const exposure = science("second_share = 0.14", "second_share = 0.18");
    const before = errorsOf(bench.measured.table, exposure);
    const after = errorsOf(refineOn(exposure), exposure);
    expect(before.core.rms).toBeGreaterThan(1e-3);
    expect(after.core.rms).toBeLessThan(0.5 * before.core.rms);
  });

  it("2 % wider than the flat, as when the focus drifted, is followed to a third of the error or better", () => {
    const exposure = science("fwhm = 2.35 ", "fwhm = 2.397 ");
    const before = errorsOf(bench.measured.table, exposure);
    const after = errorsOf(refineOn(exposure), exposure);
    expect(before.core.rms).toBeGreaterThan(2e-3);
    expect(after.core.rms).toBeLessThan(before.core.rms / 3);
    expect(after.wing.rms).toBeLessThan(1e-4);
  });

  it("stays what the flat said where the frame holds no light", () => {
    const exposure = simulateExposure(bench.scene, "sci_01");
    const dark: Frame = { ...frameOf(exposure), electrons: new Float32Array(300 * 200) };
    const refined = refineOn(exposure, dark);
    const { table } = bench.measured;
    refined.values.forEach((value, i) => {
      // Priors alone move it a little along a widening, which the flat leaves open; extraction does not refine on such a frame.
      expect(Math.abs(value - table.values[i])).toBeLessThan(4e-3);
    });
  });

  it("keeps its centre and its unit integral", () => {
    const refined = refineOn(simulateExposure(bench.scene, "sci_01"));
    expect([...refined.centroid]).toEqual([...bench.measured.table.centroid]);
    const last = refined.values.subarray((refined.n - 1) * 14, (refined.n - 1) * 14 + 7);
    expect(Math.abs(last[0] - 1)).toBeLessThan(1e-12);
    for (const end of last.subarray(1)) expect(Math.abs(end)).toBeLessThan(1e-12);
  });

  it("is not bent by cosmic rays that nobody rejected", () => {
    const exposure = simulateExposure(bench.scene, "sci_01");
    const frame = frameOf(exposure);
    const without = errorsOf(refineOn(exposure, frame), exposure);
    const hit = { ...frame, electrons: frame.electrons.slice() };
    for (let i = 0; i < 40; i++) hit.electrons[(7 + ((i * 37) % 186)) * 300 + ((i * 53) % 300)] += 3000 + 500 * i;
    const withHits = errorsOf(refineOn(exposure, hit), exposure);
    expect(withHits.core.rms).toBeLessThan(1.1 * without.core.rms);
    expect(withHits.wing.rms).toBeLessThan(1.3 * without.wing.rms);
  });
});

describe("a frame's column", () => {
  it("leaves out masked pixels and rejected ones, but not suspects, and takes noise where it is told", () => {
    const frame = frameOf(simulateExposure(bench.scene, "sci_01"));
    frame.mask[20 * 300 + 11] = MaskBit.bad;
    const rejected = new Uint8Array(300 * 200);
    rejected[21 * 300 + 11] = MaskBit.cosmic;
    rejected[22 * 300 + 11] = MaskBit.grown;
    rejected[23 * 300 + 11] = MaskBit.suspect;
    frame.noise.fixedVarianceImage = new Float32Array(300 * 200).fill(7);
    frame.noise.inverseResponse = new Float32Array(300 * 200).fill(1.25);
    const column = frameColumn(frame, rejected, 11);
    expect([...column.good.subarray(19, 25)]).toEqual([1, 0, 0, 0, 1, 1]);
    expect(column.light[24]).toBe(frame.electrons[24 * 300 + 11]);
    expect(column.fixedVariance[30]).toBe(7);
    expect(column.variancePerElectron[30]).toBe(1.25);
  });
});

describe("a background in the shape's orders", () => {
  it("is the same surface", () => {
    const narrow: SmoothBackground = { nX: 2, nY: 3, coefficients: Float64Array.of(5, -2, 0.7, 1.1, 0.3, -0.4) };
    const wide = widenBackground(narrow);
    const value = (nX: number, nY: number, c: Float64Array, u: number, v: number) => {
      const [inX, inY] = [legendreBasis(u, nX), legendreBasis(v, nY)];
      return inX.reduce((sum, p, i) => sum + p * inY.reduce((row, q, j) => row + q * c[i * nY + j], 0), 0);
    };
    for (const [u, v] of [
      [-0.9, 0.2],
      [0.35, -0.6],
      [1, 1],
    ]) {
      expect(value(3, 5, wide, u, v)).toBeCloseTo(value(2, 3, narrow.coefficients, u, v), 13);
    }
  });
});
