import fc from "fast-check";
import { beforeAll, describe, expect, it } from "vitest";
import { groupColumns as door } from "../src/kernels/groups.js";
import { type Kernels, loadKernels } from "../src/kernels/module.js";
import { type GroupedPixels, groupColumns } from "../src/reference/groups.js";

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

/** Every pixel different; with `scatter`, the light of a row strays by that much, in steps that no group repeats. */
function pixels(nx: number, ny: number, seed: number, scatter: number, kind = 0): GroupedPixels {
  const uneven = (i: number) => ((i * 7919 + seed * 104729) % 10007) / 10007;
  const at = Array.from({ length: nx * ny }, (_, i) => i);
  const electrons = Float32Array.from(at, (i) => 40 + 900 * uneven(Math.floor(i / nx) + 11) + scatter * uneven(i));
  const image = (of: (i: number) => number) => Float32Array.from(at, of);
  const noise = {
    bandOfRow: Uint8Array.from({ length: ny }, (_, y) => (y > ny / 2 ? 1 : 0)),
    fixedVariance: Float32Array.from({ length: 2 * nx }, (_, i) => 4 + uneven(i)),
    ...(kind > 0 ? { fixedVarianceImage: image((i) => 3 + uneven(i + 5)) } : {}),
    ...(kind > 1 ? { inverseResponse: image((i) => 0.95 + 0.1 * uneven(i + 6)) } : {}),
    ...(kind > 2 ? { responseRelativeVariance: image((i) => 1e-5 * uneven(i + 7)) } : {}),
  };
  const isMissing = (i: number) => uneven(3 * i) < 0.03;
  const nUsed = Uint8Array.from(at, (i) => (isMissing(i) ? 0 : kind % 2 === 1 ? 1 + (i % 3) : 1));
  at.forEach((i) => {
    if (isMissing(i)) electrons[i] = i % 2 === 1 ? Number.NaN : 7e4;
  });
  return { nx, ny, electrons, nUsed, nFrame: kind % 2 === 1 ? 3 : 1, noise };
}

/** Sums of at most 64 numbers in f32 stray by 64 · 2⁻²⁴ of the sum. */
const SINGLE = 4e-6;

function agree(frame: GroupedPixels, ranges: { from: number; to: number }[], chunkPixels?: number) {
  const own = door(kernels, frame, ranges, chunkPixels);
  ranges.forEach((range, g) => {
    const twin = groupColumns(frame, range);
    expect([...own[g].count]).toEqual([...twin.count]);
    for (let y = 0; y < frame.ny; y++) {
      if (twin.count[y] === 0) {
        expect(own[g].mean[y]).toBeNaN();
        continue;
      }
      expect(Math.abs(own[g].mean[y] / twin.mean[y] - 1)).toBeLessThan(1e-13);
      for (const key of ["fixedVariance", "variancePerElectron"] as const) {
        expect(Math.abs(own[g][key][y] / twin[key][y] - 1)).toBeLessThan(SINGLE);
      }
    }
  });
}

describe("means over groups of columns", () => {
  it("agree between kernel and reference for every width, whether pixels are hit or missing", () => {
    fc.assert(
      fc.property(
        fc.integer({ min: 1, max: 60 }),
        fc.integer({ min: 1, max: 23 }),
        fc.nat(1000),
        fc.constantFrom(0, 400, 2000),
        fc.integer({ min: 0, max: 3 }),
        (width, ny, seed, scatter, kind) => {
          const frame = pixels(width + 9, ny, seed, scatter, kind);
          agree(frame, [
            { from: 0, to: width + 9 },
            { from: 5, to: 5 + width },
            { from: width + 8, to: width + 9 },
          ]);
        },
      ),
    );
  });

  it("go on over the edges of what lies in kernel memory at once", () => {
    const frame = pixels(50, 61, 5, 2000, 2);
    const whole = [
      { from: 0, to: 7 },
      { from: 39, to: 50 },
    ];
    agree(frame, whole, 1000);
    agree(frame, [{ from: 20, to: 39 }], 100);
  });

  it("leave out what stands 8 σ and half of the neighbouring rows' difference above the row's median", () => {
    const frame = pixels(8, 3, 1, 0);
    frame.noise.fixedVariance.fill(9);
    frame.electrons.fill(100);
    frame.nUsed.fill(1);
    frame.electrons.fill(160, 16, 24);
    // σ² = 9 + 100: 8 σ = 83.5 e⁻, and half of 60 e⁻ for the row above: 213.5 e⁻.
    frame.electrons[8] = 213;
    frame.electrons[9] = 214;
    // The row below has rows of 100 e⁻ on both sides: 183.5 e⁻.
    frame.electrons[0] = 184;
    const [group] = door(kernels, frame, [{ from: 0, to: 8 }]);
    expect([...group.count]).toEqual([7, 7, 8]);
    expect([...group.mean]).toEqual([100, (6 * 100 + 213) / 7, 160]);
    expect([...group.fixedVariance]).toEqual([9 / 7, 9 / 7, 9 / 8]);
  });

  it("refuse a range that is empty or leaves the frame", () => {
    const frame = pixels(8, 3, 1, 0);
    expect(() => door(kernels, frame, [{ from: 3, to: 3 }])).toThrow("Columns 3 to 3 of 8");
    expect(() => door(kernels, frame, [{ from: 3, to: 9 }])).toThrow("a group needs one column or more");
    expect(door(kernels, frame, [])).toEqual([]);
  });
});
