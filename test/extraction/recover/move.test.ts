/** Moved light against light that the simulator made at the new place. */
import { describe, expect, it } from "vitest";
import { planExtraction } from "../../../src/extraction/plan.js";
import { columnOf } from "../../../src/extraction/recover/flatLight.js";
import { flatLines, moveColumn, moveToFrame } from "../../../src/extraction/recover/move.js";
import { simulateExposure } from "../../../src/simulate/exposure.js";
import { parseScene } from "../../../src/simulate/scene.js";
import { shiftTramlines } from "../../../src/tramlines/shift.js";
import type { Tramlines } from "../../../src/tramlines/tramlines.js";
import { BENCH, CLEAN, correctedFrame, empiricalLines, exposureOf, gaussianLines } from "../benchScene.js";
import { tramlinesFromTruth } from "../fromTruth.js";

describe("moveColumn", () => {
  it("reproduces polynomials of fifth degree, by a shift that changes along y", () => {
    const curve = (y: number) => 3 + 0.2 * y - 0.03 * (y - 9) ** 2 + 1e-4 * (y - 7) ** 3 * (y - 12) ** 2;
    const column = Float64Array.from({ length: 24 }, (_, y) => curve(y));
    const shift = (y: number) => -0.31 + 0.01 * y;
    const squares = new Float64Array(24);
    const moved = moveColumn(column, shift, squares);
    for (let y = 3; y < 20; y++) expect(moved[y]).toBeCloseTo(curve(y - shift(y)), 9);
    // Σ weight² of six-point Lagrange weights at a half: 2·(150² + 25² + 3²)/256² (Abramowitz & Stegun, table 25.1, p = 1/2).
    moveColumn(column, () => 0.5, squares);
    expect(squares[11]).toBeCloseTo((2 * (150 ** 2 + 25 ** 2 + 3 ** 2)) / 256 ** 2, 12);
  });
});

const shift = 0.31;

/** Noiseless flat light, moved by profiles `lines`, against the same light simulated `shift` px further up: root of the mean squared
 * difference over the brightest pixel, away from the frame's edges. */
function errorOf(scene: string, lines: Tramlines): { moved: number; interpolated: number } {
  const parsed = parseScene(scene, "bench");
  const description = parsed.exposure.find(({ name }) => name === "fflat_02")!;
  const still = simulateExposure(parsed, description).truth;
  const there = simulateExposure(parsed, { ...description, shift }).truth;
  const { nx, ny } = still;
  const plan = planExtraction(lines);
  const known = Float64Array.from(plan.active.flatMap((k) => [...still.flux.subarray(k * nx, (k + 1) * nx)]));
  const pixels = Float32Array.from(still.expectedElectrons(), (e, i) => e / still.response[i]);
  const goal = there.expectedElectrons().map((e, i) => e / there.response[i]);
  const movement = {
    shift: { coefficients: [shift, 0, 0], errors: [0, 0, 0], nPoint: 1, rms: 0 } as never,
    largest: shift,
  };
  const frameLines = shiftTramlines(lines, movement.shift);
  const light = { pixels, nFlaw: 0, known, level: new Float64Array(0) };
  const moved = moveToFrame(light, new Uint8Array(nx * ny).fill(1), movement, frameLines, plan);
  let [squares, plainSquares, n, brightest] = [0, 0, 0, 0];
  for (let x = 8; x < nx - 8; x++) {
    const alone = moveColumn(columnOf(pixels, nx, ny, x), () => shift, new Float64Array(ny));
    for (let y = 8; y < ny - 8; y++) {
      const at = y * nx + x;
      brightest = Math.max(brightest, goal[at]);
      squares += (moved.pixels[at] - goal[at]) ** 2;
      plainSquares += (alone[y] - goal[at]) ** 2;
      n++;
    }
  }
  return { moved: Math.sqrt(squares / n) / brightest, interpolated: Math.sqrt(plainSquares / n) / brightest };
}

describe("a flat moved by a third of a pixel", () => {
  it("is exact for true profiles, while plain interpolation errs", () => {
    const lines = tramlinesFromTruth(exposureOf(CLEAN, "fflat_02"));
    const { moved, interpolated } = errorOf(CLEAN, lines);
    expect(moved).toBeLessThan(5e-5);
    expect(interpolated).toBeGreaterThan(10 * moved);
  });

  it("errs by 0.1 % of the peak with measured profiles, by 0.2 % with Gaussians that do not fit; interpolation by 0.5 %", async () => {
    const flat = correctedFrame(exposureOf(BENCH, "fflat_01"));
    const empirical = errorOf(BENCH, await empiricalLines(flat));
    expect(empirical.moved).toBeLessThan(0.0012);
    expect(empirical.interpolated).toBeGreaterThan(4 * empirical.moved);
    const gaussian = errorOf(BENCH, await gaussianLines(flat));
    expect(gaussian.moved).toBeLessThan(0.002);
  });

  it("moves lines there and back to within 1e-3 px", () => {
    const lines = tramlinesFromTruth(exposureOf(CLEAN, "fflat_02"));
    const movement = {
      shift: { coefficients: [shift, -0.02, 0.07], errors: [0, 0, 0], nPoint: 1, rms: 0 } as never,
      largest: 0.4,
    };
    const back = flatLines(shiftTramlines(lines, movement.shift), movement);
    const off = back.legendre.map((c, i) => Math.abs(c - lines.legendre[i]));
    expect(Math.max(...off)).toBeLessThan(1e-3);
    expect(Math.max(...off)).toBeGreaterThan(0);
  });
});
