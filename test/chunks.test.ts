/** Fitting again only the fibres that still move, held against whole columns with the same pixels left out and all fibres fitted
 * at once (the reference, every round a whole one), and against themselves however the work is parted. */
import { describe, expect, it } from "vitest";
import { growRejected } from "../src/extraction/growth.js";
import type { Precision } from "../src/kernels/banded.js";
import { ExtractionBench } from "../src/kernels/extraction.js";
import { loadKernels } from "../src/kernels/module.js";
import { MaskBit } from "../src/reference/bits.js";
import type { ExtractionInput } from "../src/reference/extract.js";
import { settleGrownColumns } from "../src/reference/grown.js";
import { runBoth, runReference } from "./runs.js";
import { makeScene } from "./scene.js";

const kernels = await loadKernels();

/** Fibres `pitch` pixels apart, straight lines, and a hit of four rows that takes a round a pixel: the last are seen late. */
function lateHits(pitch: number, bandwidth: number): ExtractionInput {
  const nFibre = 120;
  const sigma = pitch < 3 ? 0.8 : 1.04;
  const options = { nx: 8, ny: Math.ceil(nFibre * pitch) + 18, nFibre, pitch, sigma, bow: 0.2 };
  const { input } = makeScene({ ...options, flux: (k) => 300 + 200 * (k % 7) });
  for (const [y, x] of [
    [60, 1],
    [131, 2],
    [202, 6],
  ]) {
    for (let j = 0; j < 4; j++) input.electrons[(y + j) * input.nx + x] += 4000 * 2.2 ** -j;
  }
  const narrow = pitch < 3 ? { halfWindow: 4 } : {};
  return { ...input, ...narrow, bandwidth, profileError: 0, kappa: 5, growKappa: 2.5, maxRounds: 12 };
}

/** Variances that do not follow the light: then nothing is left to settle but the fluxes. */
function fixedVariance(input: ExtractionInput): ExtractionInput {
  const { noise, nx, ny } = input;
  return {
    ...input,
    noise: { ...noise, fixedVariance: new Float32Array(2 * nx).fill(900), inverseResponse: new Float32Array(nx * ny) },
  };
}

/** The same pixels left out from the start, and all fibres fitted at once until nothing moves. */
function wholeColumns(input: ExtractionInput, rejected: Uint8Array) {
  const left = rejected.map((bits) => bits & (MaskBit.cosmic | MaskBit.grown));
  return runReference({ ...input, kappa: 0, growKappa: 0, rejected: left, minRounds: 25, maxRounds: 25 });
}

function worstInSigma(found: ArrayLike<number>, whole: ReturnType<typeof runReference>): number {
  return Array.from(found).reduce((worst, flux, i) => {
    if (Number.isNaN(whole.flux[i])) return worst;
    const off = Math.abs(flux - whole.flux[i]) / Math.sqrt(whole.variance[i]);
    return Number.isNaN(off) ? Number.POSITIVE_INFINITY : Math.max(worst, off);
  }, 0);
}

function openBench(input: ExtractionInput, precision: Precision = "f64"): ExtractionBench {
  const rows = Int32Array.from({ length: input.nFibre }, (_, k) => k);
  return new ExtractionBench(kernels, input, rows, input.nFibre, precision);
}

const count = (rejected: Uint8Array, bit: number) => rejected.filter((bits) => bits & bit).length;

describe.each([
  [5, 2],
  [2, 5],
])("fibres %s px apart, bandwidth %s", (pitch, bandwidth) => {
  const input = lateHits(pitch, bandwidth);

  it("settle in chunks where whole columns settle, were variances known", () => {
    const known = fixedVariance(input);
    for (const [name, result] of runBoth(known)) {
      expect(count(result.rejected, MaskBit.cosmic), name).toBeGreaterThan(7);
      expect(worstInSigma(result.flux, wholeColumns(known, result.rejected)), name).toBeLessThan(1e-6);
    }
  });

  it("settle within the tenth of σ at which rounds end, and closer with more of them", () => {
    for (const [minRounds, bound] of [
      [2, 0.1],
      [9, 1e-3],
    ]) {
      for (const [name, result] of runBoth({ ...input, minRounds, maxRounds: 20 })) {
        expect(worstInSigma(result.flux, wholeColumns(input, result.rejected)), name).toBeLessThan(bound);
      }
    }
  });

  it("take what has grown into account as a new extraction would, near it and nowhere else", () => {
    const known = fixedVariance(input);
    const bench = openBench(known);
    bench.run();
    const before = bench.output.flux.slice();
    const own = runReference(known);
    const { nx, nFibre } = known;
    const y = Math.round(known.trace[4 * 60]);
    for (const rejected of [bench.rejected, own.rejected]) {
      rejected[y * nx + 4] |= MaskBit.grown;
    }
    bench.settleGrown();
    settleGrownColumns({ ...known, rejected: own.rejected }, own, 0, nx);
    expect(worstInSigma(bench.output.flux, own)).toBeLessThan(1e-9);
    expect(bench.output.flags).toEqual(own.flags);
    const whole = wholeColumns(known, bench.rejected);
    expect(worstInSigma(bench.output.flux, whole)).toBeLessThan(1e-3);
    const moved = Array.from({ length: nFibre }, (_, k) => k).filter(
      (k) => bench.output.flux[k * nx + 4] !== before[k * nx + 4],
    );
    expect(moved).toContain(60);
    // A chunk of eight, and half its margin to each side; two chunks where both see the pixel.
    expect(Math.max(...moved) - Math.min(...moved)).toBeLessThan(16 + 4 * bandwidth);
  });
});

it.each(["f32", "f64"] as const)("columns come out the same however the frame is parted: %s", (precision) => {
  const rough = { ...lateHits(5, 2), blockColumns: 16 as const };
  const { input: wide } = makeScene({ nx: 83, seed: 9 });
  for (let i = 0; i < 30; i++) wide.electrons[(3 + 3 * i) * wide.nx + ((7 * i) % 80)] += 800;
  for (const input of [rough, { ...wide, kappa: 5, growKappa: 2.5 }]) {
    const whole = openBench(input, precision);
    whole.run();
    const parted = openBench(input, precision);
    const starts = Array.from({ length: Math.ceil(input.nx / 4) }, (_, i) => 4 * i).reverse();
    for (const x0 of starts) parted.run(x0, Math.min(x0 + 4, input.nx));
    for (const bench of [whole, parted]) growRejected(bench.rejected, input.nx, input.ny);
    whole.settleGrown();
    for (const x0 of starts) parted.settleGrown(x0, Math.min(x0 + 4, input.nx));
    expect(parted.output).toEqual(whole.output);
    expect(parted.rejected).toEqual(whole.rejected);
  }
});

it.each([1, 2, 3, 5, 13, 16, 17, 19, 20])("a frame of %s columns has no column that its lanes forget", (nx) => {
  const { input } = makeScene({ nx, bow: 0 });
  const reference = runReference(input);
  const bench = openBench(input);
  bench.run();
  expect(worstInSigma(bench.output.flux, reference)).toBeLessThan(1e-9);
  expect(bench.output.flags).toEqual(reference.flags);
});
