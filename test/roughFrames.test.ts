/** Whatever a frame holds, the kernel does what the reference does, and stays within its memory. */
import fc from "fast-check";
import { describe, expect, it } from "vitest";
import { ExtractionBench } from "../src/kernels/extraction.js";
import { loadKernels } from "../src/kernels/module.js";
import { MaskBit } from "../src/reference/bits.js";
import type { ExtractionInput, Method } from "../src/reference/extract.js";
import { type Result, runKernel, runReference } from "./runs.js";
import { makeScene, seeded } from "./scene.js";

const kernels = await loadKernels();
const images = ["flux", "variance", "neighbourCovariance", "chi2", "background"] as const;

/** Where nearly everything is masked, fits are badly conditioned (a fibre takes part with 1 % of its light): sums that
 * differ by a few times 1e-16 come out worse. test/extract.test.ts holds a usual frame to 1e-10. */
const bound = 1e-8;

interface Rough {
  nx: number;
  ny: number;
  nFibre: number;
  pitch: number;
  sigma: number;
  offset: number;
  halfWindow: number;
  blockColumns: 4 | 8 | 16;
  method: [Method, boolean];
  rejecting: boolean;
  calibrationImages: boolean;
  masked: number;
  deadRow: boolean;
  patch: boolean;
  seed: number;
}

const rough: fc.Arbitrary<Rough> = fc.record({
  nx: fc.integer({ min: 1, max: 70 }),
  ny: fc.integer({ min: 1, max: 60 }),
  nFibre: fc.integer({ min: 1, max: 9 }),
  pitch: fc.double({ min: 2.5, max: 9, noNaN: true }),
  sigma: fc.double({ min: 0.6, max: 1.4, noNaN: true }),
  offset: fc.double({ min: -40, max: 20, noNaN: true }),
  halfWindow: fc.integer({ min: 1, max: 8 }),
  blockColumns: fc.constantFrom(4, 8, 16),
  method: fc.constantFrom<[Method, boolean][]>(
    ["joint", false],
    ["optimal", false],
    ["optimal", true],
    ["boxcar", false],
    ["boxcar", true],
  ),
  rejecting: fc.boolean(),
  calibrationImages: fc.boolean(),
  masked: fc.constantFrom(0, 0.02, 0.3, 0.95),
  deadRow: fc.boolean(),
  patch: fc.boolean(),
  seed: fc.nat(),
});

function roughInput(r: Rough): ExtractionInput {
  const { nx, ny, nFibre } = r;
  const height = Math.max(ny, 30 + Math.ceil(nFibre * r.pitch)); // the scene has room; the frame is cut from it
  const { input } = makeScene({ ...r, ny: height, bow: 0.3 });
  const next = seeded(r.seed + 1);
  const cut = <T extends Float32Array | Uint8Array>(image: T) => image.slice(0, nx * ny) as T;
  const mask = new Uint8Array(nx * ny);
  const electrons = cut(input.electrons);
  for (let i = 0; i < nx * ny; i++) {
    if (next() < r.masked) mask[i] = 1 << Math.floor(3 * next());
    if (mask[i] && next() < 0.5) electrons[i] = next() < 0.5 ? Number.NaN : 1e30;
    if (next() < 0.01) electrons[i] += 1e4 * next();
  }
  if (r.deadRow) mask.fill(MaskBit.bad, nx * Math.floor(ny * next()), nx * ny);
  for (let y = 0; r.patch && y < ny / 2; y++) mask.fill(MaskBit.saturated, y * nx, y * nx + Math.ceil(nx / 3));
  const trace = input.trace.slice();
  for (let k = 0; k < nFibre; k++) trace[4 * k] += r.offset;
  const { noise } = input;
  const kept: ExtractionInput["noise"] = {
    bandOfRow: noise.bandOfRow.slice(0, ny),
    fixedVariance: noise.fixedVariance,
  };
  if (noise.fixedVarianceImage) kept.fixedVarianceImage = cut(noise.fixedVarianceImage);
  if (noise.inverseResponse) kept.inverseResponse = cut(noise.inverseResponse);
  if (noise.responseRelativeVariance) kept.responseRelativeVariance = cut(noise.responseRelativeVariance);
  return {
    ...input,
    ny,
    electrons,
    mask,
    noise: kept,
    trace,
    halfWindow: r.halfWindow,
    blockColumns: nx < 2 * r.blockColumns ? 4 : r.blockColumns, // wider, and the lines leave their windows within a block
    bandwidth: Math.min(nFibre - 1, Math.ceil((2 * r.halfWindow + 2) / r.pitch)),
    method: r.method[0],
    crosstalk: r.method[1],
    halfAperture: r.pitch / 2,
    kappa: r.rejecting ? 5 : 0,
    growKappa: 2.5,
    rejected: new Uint8Array(nx * ny),
  };
}

function expectAlike(found: Result, expected: Result): void {
  expect(found.flags).toEqual(expected.flags);
  expect(found.rejected).toEqual(expected.rejected);
  for (const image of images) {
    for (let i = 0; i < found.flux.length; i++) {
      const [a, b] = [found[image][i], expected[image][i]];
      expect(Number.isNaN(a), `${image}[${i}]: ${a}, ${b}`).toBe(Number.isNaN(b));
      const scale = Math.abs(b) + (image === "flux" ? Math.sqrt(expected.variance[i]) : 1e-3);
      if (!Number.isNaN(b)) expect(Math.abs(a - b) / scale, `${image}[${i}]: ${a}, ${b}`).toBeLessThanOrEqual(bound);
    }
  }
}

describe("rough frames", () => {
  it("come out of kernel and reference alike: masks, NaN, saturation, fibres off the frame, every width", () => {
    fc.assert(
      fc.property(rough, (r) => {
        const input = roughInput(r);
        expectAlike(runKernel(input), runReference(input));
      }),
      { seed: 20, numRuns: 300, endOnFailure: true },
    );
  });

  it("never make a value out of masked pixels: what lies there, NaN or 1e30, changes no bit", () => {
    fc.assert(
      fc.property(rough, (r) => {
        const input = roughInput(r);
        const emptied = { ...input, electrons: input.electrons.map((e, i) => (input.mask[i] ? -7 : e)) };
        for (const precision of ["f64", "f32"] as const) {
          const [a, b] = [runKernel(input, precision), runKernel(emptied, precision)];
          for (const image of [...images, "flags", "rejected"] as const) expect(a[image]).toEqual(b[image]);
        }
      }),
      { seed: 21, numRuns: 100 },
    );
  });

  it("take a value that is none for missing, marked or not: it spoils no more than its own pixel", () => {
    const { input } = makeScene({ nx: 30, seed: 5 });
    const at = 40 * 30 + 11;
    input.electrons[at] = Number.NaN;
    const marked = { ...input, mask: input.mask.slice() };
    marked.mask[at] = MaskBit.missing;
    for (const run of [(i: ExtractionInput) => runKernel(i), runReference]) {
      const [unmarked, told] = [run(input), run(marked)];
      expect(unmarked.flux).toEqual(told.flux);
      expect(unmarked.flags).toEqual(told.flags);
      expect(unmarked.flux.filter(Number.isNaN).length).toBe(0);
    }
  });

  it("are refused with a width that is not above 0", () => {
    const { input } = makeScene();
    input.width[2] = -1;
    expect(() => runKernel(input)).toThrow("The width of fibre 1 of this extraction is not above 0 everywhere.");
  });

  it("give the same bits however the columns are shared out", () => {
    fc.assert(
      fc.property(rough, fc.integer({ min: 1, max: 4 }), (r, blocks) => {
        const input = roughInput(r);
        const rows = Int32Array.from({ length: input.nFibre }, (_, k) => k);
        for (const precision of ["f64", "f32"] as const) {
          const whole = runKernel(input, precision);
          const bench = new ExtractionBench(kernels, input, rows, input.nFibre, precision);
          const step = blocks * input.blockColumns;
          for (let x0 = step * Math.floor((input.nx - 1) / step); x0 >= 0; x0 -= step) {
            bench.run(x0, Math.min(x0 + step, input.nx));
          }
          for (const image of [...images, "flags"] as const) expect(bench.output[image]).toEqual(whole[image]);
        }
      }),
      { seed: 22, numRuns: 60 },
    );
  });

  it("are not asked for in columns that they do not have, which would write into other memory", () => {
    const { input } = makeScene({ nx: 40 });
    const rows = Int32Array.from({ length: input.nFibre }, (_, k) => k);
    const bench = new ExtractionBench(kernels, input, rows, input.nFibre, "f64");
    expect(() => bench.run(0, 41)).toThrow("Columns 0 … 40 asked for, but the frame has 0 … 39.");
    expect(() => bench.run(-16, 40)).toThrow("Columns -16 … 39 asked for, but the frame has 0 … 39.");
    expect(() => bench.run(6, 40)).toThrow("Column 6 begins no group of four columns.");
  });

  it("refuse images and tables that do not fit, by name", () => {
    const { input } = makeScene();
    const rows = Int32Array.from({ length: input.nFibre }, (_, k) => k);
    const open = (change: Partial<ExtractionInput>, nSlit = input.nFibre) =>
      new ExtractionBench(kernels, { ...input, ...change }, rows, nSlit, "f64");
    expect(() => open({ mask: new Uint8Array(7) })).toThrow("mask holds 7 numbers, but this extraction needs 5917.");
    expect(() => open({ seen: new Int32Array(3) })).toThrow("seen holds 3 numbers, but this extraction needs 34.");
    expect(() => open({}, 16)).toThrow("outputRow names a row outside the 16 of the slit.");
    const bandOfRow = new Uint8Array(input.ny).fill(2);
    expect(() => open({ noise: { ...input.noise, bandOfRow } })).toThrow(
      "fixedVariance holds 2 bands of 61 columns, fewer than bandOfRow names.",
    );
  });

  it("leave what they are made of untouched", () => {
    const input = roughInput({ ...fc.sample(rough, { seed: 4, numRuns: 1 })[0], nx: 33, ny: 40, rejecting: true });
    const [electrons, mask, rejected] = [input.electrons.slice(), input.mask.slice(), input.rejected.slice()];
    runKernel(input);
    expect(input.electrons).toEqual(electrons);
    expect(input.mask).toEqual(mask);
    expect(input.rejected).toEqual(rejected);
  });
});
