import { bench, describe } from "vitest";
import { type BandedSystem, solveBandedSystems } from "../src/kernels/banded.js";
import { loadKernels } from "../src/kernels/module.js";
import { factorBand, inverseBand, solveBand } from "../src/reference/banded.js";
import { seeded } from "../test/scene.js";
import { printMachine, sink } from "./machine.js";

const kernels = await loadKernels();
const bandwidth = 2;
/** Four systems a run for everyone: one call of four f32 lanes, two calls of two f64 lanes, four of the reference. */
const nSystem = 4;

printMachine("banded");

function systems(n: number): BandedSystem[] {
  const next = seeded(n);
  return Array.from({ length: nSystem }, () => {
    const band = Float64Array.from({ length: n * (bandwidth + 1) }, () => next() - 0.5);
    for (let i = 0; i < n; i++) band[i * (bandwidth + 1)] = 2 + next();
    return { band, rhs: Float64Array.from({ length: n }, () => next()) };
  });
}

function byReference({ band, rhs }: BandedSystem, n: number): Float64Array {
  const [factors, x] = [band.slice(), rhs.slice()];
  factorBand(factors, n, bandwidth);
  sink.sum += inverseBand(factors, n, bandwidth)[0];
  solveBand(factors, n, bandwidth, x);
  return x;
}

describe.each([100, 400, 1600])("factor, solve and invert 4 systems of %d fibres, copies included", (n) => {
  const all = systems(n);
  const f64 = () =>
    [all.slice(0, 2), all.slice(2)].flatMap((pair) => solveBandedSystems(kernels, pair, n, bandwidth, "f64"));
  const f32 = () => solveBandedSystems(kernels, all, n, bandwidth, "f32");
  const expected = all.map((system) => byReference(system, n));
  for (const [solve, bound] of [
    [f64, 1e-13],
    [f32, 1e-5],
  ] as const) {
    solve().forEach(({ x }, i) => {
      if (x.some((value, j) => !(Math.abs(value - expected[i][j]) < bound))) throw new Error("banded: answers differ");
    });
  }
  const options = { time: 400 };
  bench("kernel f64", () => void (sink.sum += f64()[0].x[0]), options);
  bench("kernel f32", () => void (sink.sum += f32()[0].x[0]), options);
  bench("reference", () => void (sink.sum += all.reduce((sum, system) => sum + byReference(system, n)[0], 0)), options);
});
