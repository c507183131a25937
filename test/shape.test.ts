import fc from "fast-check";
import { describe, expect, it } from "vitest";
import { ExtractionBench } from "../src/kernels/extraction.js";
import { loadKernels } from "../src/kernels/module.js";
import { blockProfiles } from "../src/reference/profile.js";
import { centroidOf, nShapeTerm, shapeAt, shapeTerms, shapeWeights } from "../src/reference/shape.js";
import { makeScene } from "./scene.js";
import { analyticTable, trueCentroids, trueCumulative } from "./tramlines/shape/analytic.js";

const kernels = await loadKernels();
const table = analyticTable();
const centred = { ...table, centroid: Float64Array.from(trueCentroids) };
/** Of the cubic between the table's points: analytic.ts. */
const tableError = 4e-9;

const place = fc.record({
  x: fc.double({ min: -1, max: 1, noNaN: true }),
  y: fc.double({ min: -1, max: 1, noNaN: true }),
  width: fc.double({ min: 1, max: 1.2, noNaN: true }),
  centre: fc.double({ min: 30, max: 31, noNaN: true }),
});

describe("terms of a shape", () => {
  it("are Legendre's in x and y, their product, and the width in units of 5 %", () => {
    // P₂(0.3) = (3·0.09 − 1)/2 and P₂(−0.7) = (3·0.49 − 1)/2: Abramowitz & Stegun 22.4.10.
    const wanted = [1, 0.3, -0.365, -0.7, 0.235, -0.21, 1.6];
    [...shapeTerms(0.3, -0.7, 1.08, 1)].forEach((term, m) => {
      expect(term).toBeCloseTo(wanted[m], 13);
    });
  });
});

describe("weights of a shape, reference", () => {
  it("are the differences of the closed form at the pixels' edges, stretched by the width", () => {
    fc.assert(
      fc.property(place, ({ x, y, width, centre }) => {
        const terms = shapeTerms(x, y, width, table.referenceWidth);
        const weights = shapeWeights(table, terms, centre, width, 17, 28);
        const at = (row: number) =>
          trueCumulative(((row - centre) * table.referenceWidth) / width).reduce((sum, c, m) => sum + terms[m] * c, 0);
        weights.forEach((weight, i) => {
          expect(Math.abs(weight - (at(17 + i + 0.5) - at(17 + i - 0.5)))).toBeLessThan(5 * tableError);
        });
      }),
    );
  });

  it("have sum 1 over the whole profile, and their centroid at the centre once that is told", () => {
    fc.assert(
      fc.property(place, ({ x, y, width, centre }) => {
        const terms = shapeTerms(x, y, width, table.referenceWidth);
        const weights = shapeWeights(centred, terms, centre, width, 10, 41);
        const sum = weights.reduce((total, weight) => total + weight, 0);
        const mean = weights.reduce((total, weight, i) => total + weight * (10 + i), 0);
        expect(Math.abs(sum - 1)).toBeLessThan(1e-9);
        // A pixel's weight is the profile blurred by the pixel: the sampled mean of that is the profile's own to the
        // profile's Fourier transform at one cycle a pixel, 2·exp(−2π²·1²) / 2π = 1e-9 for σ = 1 px.
        expect(Math.abs(mean - centre)).toBeLessThan(2e-7);
      }),
    );
  });

  it("let shapeAt give a slope that is its value's, and hold both beyond the table's ends", () => {
    const terms = shapeTerms(0.4, -0.3, 1.15, table.referenceWidth);
    const [below, here, above] = [new Float64Array(2), new Float64Array(2), new Float64Array(2)];
    const h = 1e-5;
    for (let v = -4.003; v < 4; v += 0.0771) {
      shapeAt(table, terms, v - h, below);
      shapeAt(table, terms, v, here);
      shapeAt(table, terms, v + h, above);
      expect(Math.abs(here[1] - (above[0] - below[0]) / (2 * h))).toBeLessThan(1e-8);
    }
    shapeAt(table, terms, 1e9, here);
    expect(Math.abs(here[0] - 1)).toBeLessThan(1e-9);
    expect(Math.abs(here[1])).toBeLessThan(1e-9);
    shapeAt(table, terms, -1e9, here);
    expect(Math.abs(here[0])).toBeLessThan(1e-9);
  });
});

describe("weights of a shape, kernel", () => {
  it("are the reference's at every node, off the frame too", () => {
    const { input } = makeScene({ nx: 48 });
    input.trace[0] = -7.4; // windows that begin below the frame, and end above it
    input.trace[4 * 16] = 96.2;
    const shaped = { ...input, shape: centred, halfWindow: 14, bandwidth: 6 };
    const rows = Int32Array.from({ length: input.nFibre }, (_, k) => k);
    for (const blockColumns of [4, 16] as const) {
      const problem = { ...shaped, blockColumns };
      const found = new ExtractionBench(kernels, problem, rows, input.nFibre, "f64").nodeWeights(16);
      const wanted = blockProfiles(problem, 16).weights;
      expect(found.length).toBe(wanted.length);
      // Seven products and a cubic of numbers below 1, at positions v below 20 whose rounding counts as slope ≤ 0.4.
      expect(Math.max(...found.map((weight, i) => Math.abs(weight - wanted[i])))).toBeLessThan(100 * 2 ** -53);
      expect(Math.max(...wanted)).toBeGreaterThan(0.3);
    }
  });

  it("in single precision differ by its rounding alone", () => {
    const { input } = makeScene({ nx: 48 });
    const problem = { ...input, shape: centred, halfWindow: 14, bandwidth: 6 };
    const rows = Int32Array.from({ length: input.nFibre }, (_, k) => k);
    const found = new ExtractionBench(kernels, problem, rows, input.nFibre, "f32").nodeWeights(0);
    const wanted = blockProfiles(problem, 0).weights;
    const worst = Math.max(...wanted.map((weight, i) => (weight > 1e-6 ? Math.abs(found[i] / weight - 1) : 0)));
    expect(worst).toBeLessThan(2 ** -23);
    expect(worst).toBeGreaterThan(2 ** -27);
  });
});

describe("centroid of a shape", () => {
  it("is the sum of its terms' own", () => {
    const terms = Float64Array.of(1, 0.5, -0.25, 2, 0, 1, 4);
    expect(terms.length).toBe(nShapeTerm);
    const table7 = { ...table, centroid: Float64Array.of(0.1, 0.2, 0.4, 0.03, 9, 0.005, -0.01) };
    expect(centroidOf(table7, terms)).toBeCloseTo(0.1 + 0.1 - 0.1 + 0.06 + 0.005 - 0.04, 14);
  });
});
