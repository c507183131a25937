import fc from "fast-check";
import { describe, expect, it } from "vitest";
import { ExtractionBench } from "../src/kernels/extraction.js";
import { loadKernels } from "../src/kernels/module.js";
import { gaussianWeights as kernelWeights } from "../src/kernels/profile.js";
import { legendreArgument, legendreValue } from "../src/reference/legendre.js";
import {
  type BlockColumns,
  blockNodes,
  blockProfiles,
  columnWeights,
  gaussianWeights,
  largestMovement,
  nodeShares,
} from "../src/reference/profile.js";
import { judgeMissing, python } from "./judges.js";
import { runKernel, runReference } from "./runs.js";
import { makeScene } from "./scene.js";

const kernels = await loadKernels();
const doors: [string, typeof gaussianWeights][] = [
  ["reference", gaussianWeights],
  ["kernel", (centre, sigma, first, n) => kernelWeights(kernels, centre, sigma, first, n)],
];
const fwhmPerSigma = 2 * Math.sqrt(2 * Math.log(2));

function sum(values: Iterable<number>): number {
  let total = 0;
  for (const value of values) total += value;
  return total;
}

const scipyScript = `
import json, sys
import numpy as np
from scipy.special import ndtr
q = json.loads(sys.argv[1])
out = []
for centre, sigma, first, n in q:
    low = (np.arange(first, first + n) - 0.5 - centre) / sigma
    high = low + 1 / sigma
    # differences taken on the side where ndtr is small, so that the tails keep their digits
    out.append(np.where(low > 0, ndtr(-low) - ndtr(-high), ndtr(high) - ndtr(low)).tolist())
print(json.dumps(out))
`;

describe.each(doors)("Gaussian on pixels, %s", (_, weigh) => {
  it("of FWHM 2.5 px puts 98.147 % into five pixels and 0.9266 % into each neighbour's at pitch 5 px", () => {
    // Closed form, from erf; half of the last printed digit.
    const sigma = 2.5 / fwhmPerSigma;
    for (const centre of [40, 43]) {
      expect(Math.abs(sum(weigh(centre, sigma, centre - 2, 5)) - 0.98147)).toBeLessThan(5e-6);
      expect(Math.abs(sum(weigh(centre, sigma, centre + 3, 5)) - 0.009266)).toBeLessThan(5e-7);
      expect(Math.abs(sum(weigh(centre, sigma, centre - 7, 5)) - 0.009266)).toBeLessThan(5e-7);
    }
  });

  it("sums to 1 over all of its pixels, wherever it stands", () => {
    for (let i = 0; i < 50; i++) {
      const [centre, sigma] = [-30.7 + 13.37 * i, 0.31 + 0.057 * i];
      const reach = Math.ceil(9 * sigma);
      const weights = weigh(centre, sigma, Math.floor(centre) - reach, 2 * reach + 2);
      expect(Math.abs(sum(weights) - 1)).toBeLessThan(1e-15);
    }
  });

  it.skipIf(judgeMissing("scipy"))("is the difference of scipy.special.ndtr at the pixels' edges", () => {
    const cases: [number, number, number, number][] = [];
    for (let i = 0; i < 40; i++) cases.push([100 + 7.123 * i, 0.4 + 0.09 * i, 91 + 7 * i, 21]);
    const judged: number[][] = JSON.parse(python(scipyScript, [JSON.stringify(cases)]));
    cases.forEach((one, i) => {
      weigh(...one).forEach((weight, j) => {
        expect(Math.abs(weight - judged[i][j])).toBeLessThan(1e-15);
      });
    });
  });
});

describe("profiles in kernel and reference", () => {
  it("are the same to 1e-14 over a grid of centres and widths", () => {
    let worst = 0;
    for (let sigma = 0.2; sigma < 8; sigma *= 1.13) {
      for (let centre = -6.9; centre < 60; centre += 0.733) {
        const found = kernelWeights(kernels, centre, sigma, 17, 30);
        gaussianWeights(centre, sigma, 17, 30).forEach((weight, i) => {
          worst = Math.max(worst, Math.abs(weight - found[i]));
        });
      }
    }
    expect(worst).toBeLessThan(1e-14);
    expect(worst).toBeGreaterThan(0); // two ways to erf: equal bits throughout would mean that one was tested twice
  });

  it.each([4, 8, 16] as const)("are interpolated alike over blocks of %d columns, fluxes to 1e-11", (blockColumns) => {
    const { input } = makeScene({ nx: 53, ny: 123, bow: 2.9, pitch: 6.1 });
    const change = { ...input, blockColumns, minRounds: 2 };
    const [found, expected] = [runKernel(change), runReference(change)];
    for (let i = 0; i < expected.flux.length; i++) {
      const scale = Math.abs(expected.flux[i]) + Math.sqrt(expected.variance[i]);
      expect(Math.abs(found.flux[i] - expected.flux[i]) / scale).toBeLessThan(1e-11);
    }
  });

  it.each([
    ["f64", 2 ** -53],
    ["f32", 2e-8],
  ] as const)("are at the nodes of %s what its rounding and erf's cells leave of them", (precision, fromCells) => {
    const { input } = makeScene({ nx: 53, ny: 123, bow: 2.9, pitch: 6.1 });
    const rows = Int32Array.from({ length: input.nFibre }, (_, k) => k);
    const wide = { ...input, halfWindow: 14, bandwidth: 6, blockColumns: 16 as const };
    for (const shrunk of [0.3, 1, 2.7]) {
      const problem = { ...wide, width: input.width.map((coefficient) => shrunk * coefficient) };
      const found = new ExtractionBench(kernels, problem, rows, input.nFibre, precision).nodeWeights(16);
      // In f64 that of positions below 16 px, 2⁻⁵⁰ at a time, four times over; they count as the profile's slope, up to 1.
      const rounding = precision === "f64" ? 4 * 2 ** -50 : 2 ** -25;
      const wanted = blockProfiles(problem, 16).weights;
      wanted.forEach((weight, i) => {
        expect(Math.abs(found[i] - weight)).toBeLessThan(rounding + fromCells);
      });
      expect(Math.max(...wanted)).toBeGreaterThan(0.1);
    }
  });

  it("refuse widths and windows that make no sense, by name", () => {
    expect(() => kernelWeights(kernels, 3, 0, 0, 5)).toThrow("A profile's σ of 0 pixels; it must be positive.");
    expect(() => kernelWeights(kernels, 3, 1, 0, 257)).toThrow("A window of 257 pixels; 1 to 256 are possible.");
  });
});

describe("interpolation along a block", () => {
  it.each([4, 8, 16, 32, 64] as const)("reproduces cubics over %d columns: shares sum to 1", (blockColumns) => {
    fc.assert(
      fc.property(fc.array(fc.double({ min: -3, max: 3, noNaN: true }), { minLength: 4, maxLength: 4 }), (c) => {
        const cubic = (x: number) => c[0] + x * (c[1] + x * (c[2] / 8 + (x * c[3]) / 64));
        const nodes = blockNodes(blockColumns);
        for (let offset = 0; offset < blockColumns; offset++) {
          const shares = nodeShares(blockColumns, offset);
          expect(Math.abs(sum(shares) - 1)).toBeLessThan(1e-14);
          const value = shares.reduce((total, share, i) => total + share * cubic(nodes[i]), 0);
          expect(Math.abs(value - cubic(offset))).toBeLessThan(2e-11);
        }
      }),
      { seed: 3, numRuns: 50 },
    );
  });

  it("misses the next power by the node polynomial, and nothing at the nodes of four columns", () => {
    // Remainder of interpolation (Abramowitz & Stegun 25.2.2): xⁿ less its interpolant through n nodes is Π (x − node).
    for (const blockColumns of [4, 8, 16, 32, 64] as const) {
      const nodes = blockNodes(blockColumns);
      const n = nodes.length;
      for (let offset = 0; offset < blockColumns; offset++) {
        const value = nodeShares(blockColumns, offset).reduce((total, s, i) => total + s * nodes[i] ** n, 0);
        const remainder = nodes.reduce((product, node) => product * (offset - node), 1);
        expect(Math.abs(offset ** n - value - remainder)).toBeLessThan(1e-12 * blockColumns ** n);
      }
    }
    expect(blockNodes(4)).toEqual([0, 1, 2, 3]);
  });

  it.each([8, 16, 32, 64] as const)(
    "keeps weights to 1e-6 over %d columns at the largest movement allowed",
    (blockColumns) => {
      for (const sigma of [0.65, 0.8, 1.1, 1.6]) {
        const movement = largestMovement(sigma);
        expect(worstInterpolation(blockColumns, sigma, movement)).toBeLessThan(1e-6);
        // Half as much again is too much, so that the bound is not an idle one.
        expect(worstInterpolation(blockColumns, sigma, 1.5 * movement)).toBeGreaterThan(1e-6);
      }
    },
  );

  it("leaves nothing to interpolate in blocks of four columns, however steep the line", () => {
    expect(worstInterpolation(4, 0.8, 3)).toBeLessThan(1e-14);
  });
});

/** Largest error of an interpolated weight on lines that move by `movement` pixels in a block, at every sub-pixel phase. */
function worstInterpolation(blockColumns: BlockColumns, sigma: number, movement: number): number {
  const nx = 4 * blockColumns;
  const halfSpan = ((movement / blockColumns) * (nx - 1)) / 2;
  const nFibre = 47;
  const trace = Float64Array.from({ length: 2 * nFibre }, (_, i) => (i % 2 ? halfSpan : 20 + (i * 21.37) / 2));
  const width = new Float64Array(nFibre).fill(sigma);
  const shape = { nx, ny: 1100, nFibre, halfWindow: 6, wing: 0, blockColumns, trace, nTrace: 2, width, nWidth: 1 };
  let worst = 0;
  for (let x0 = 0; x0 < nx; x0 += blockColumns) {
    const block = blockProfiles(shape, x0);
    for (let offset = 0; offset < blockColumns; offset++) {
      const found = columnWeights(block, 13, nodeShares(blockColumns, offset));
      for (let k = 0; k < nFibre; k++) {
        const y = legendreValue(trace, legendreArgument(x0 + offset, nx), 2 * k, 2);
        gaussianWeights(y, sigma, block.start[k], 13).forEach((weight, i) => {
          worst = Math.max(worst, Math.abs(weight - found[13 * k + i]));
        });
      }
    }
  }
  return worst;
}
