import fc from "fast-check";
import { describe, expect, test } from "vitest";
import { normalCumulative } from "../../src/simulate/gaussian.js";
import { buildProfileTable, type ProfileShape, profileWeights } from "../../src/simulate/profile.js";
import { sum } from "./benches.js";

const GAUSSIAN: ProfileShape = {
  secondShare: 0,
  secondWidth: 1,
  secondOffset: 0,
  wingShare: 0,
  wing: "exponential",
  wingScale: 4,
  wingBeta: 2,
  reach: 10,
};
const SKEWED: ProfileShape = { ...GAUSSIAN, secondWidth: 1.6, secondOffset: 0.4, wingShare: 0.03, reach: 50 };
/** Of the cubic tables: h⁴/384 · max|Φ⁗| = 1.3e-11 at h = 1/128, for the differences of two of them. */
const TABLE_ERROR = 3e-11;

function weights(
  shape: ProfileShape,
  centre: number,
  sigma: number,
  share: number,
  y0: number,
  n: number,
): Float64Array {
  const out = new Float64Array(n);
  profileWeights(buildProfileTable(shape), centre, sigma, share, y0, n, out);
  return out;
}

describe("the normal distribution", () => {
  // Abramowitz & Stegun, table 7.1; half of the last printed digit, halved again since Φ = (1 + erf)/2.
  test.each([
    [0.5, 0.5204998778],
    [1, 0.8427007929],
    [1.5, 0.9661051465],
    [2, 0.995322265],
  ])("Φ from erf(%f)", (x, erf) => {
    expect(Math.abs(normalCumulative(x * Math.SQRT2) - (1 + erf) / 2)).toBeLessThan(2.6e-11);
    expect(Math.abs(normalCumulative(-x * Math.SQRT2) - (1 - erf) / 2)).toBeLessThan(2.6e-11);
  });

  // scipy.special.erfc, ten digits.
  test.each([
    [4, 1.54172579e-8],
    [6, 2.151973671e-17],
  ])("its tail from erfc(%f)", (x, erfc) => {
    expect(Math.abs((2 * normalCumulative(-x * Math.SQRT2)) / erfc - 1)).toBeLessThan(1e-9);
  });
});

describe("pixel-integrated profiles", () => {
  test("a pixel in the middle of a Gaussian of σ = 1/√2 holds erf(0.5)", () => {
    // Abramowitz & Stegun, table 7.1.
    expect(Math.abs(weights(GAUSSIAN, 17, Math.SQRT1_2, 0, 17, 1)[0] - 0.5204998778)).toBeLessThan(5e-11 + TABLE_ERROR);
  });

  test("FWHM 2.5 px: 5 pixels hold 98.147 %, and 0.9266 % lie on each neighbour's", () => {
    // From erf: erf(2.5/(σ√2)) and half the difference to erf(7.5/(σ√2)), σ = 2.5/2.354820.
    const all = weights(GAUSSIAN, 30, 2.5 / 2.354820045, 0, 28, 10);
    expect(Math.abs(sum(all.subarray(0, 5)) - 0.98147)).toBeLessThan(5e-6);
    expect(Math.abs(sum(all.subarray(5, 10)) - 0.009266)).toBeLessThan(5e-7);
  });

  test("every profile has integral 1 and its centroid on the centre, wings included", () => {
    const shapes = fc.record({
      secondShare: fc.double({ min: 0, max: 0.3, noNaN: true }),
      secondWidth: fc.double({ min: 0.6, max: 3, noNaN: true }),
      secondOffset: fc.double({ min: -1, max: 1, noNaN: true }),
      wingShare: fc.double({ min: 0, max: 0.2, noNaN: true }),
      wing: fc.constantFrom("exponential" as const, "moffat" as const),
      wingScale: fc.double({ min: 1, max: 5, noNaN: true }),
      wingBeta: fc.double({ min: 1.5, max: 4, noNaN: true }),
      reach: fc.double({ min: 20, max: 60, noNaN: true }),
    });
    fc.assert(
      fc.property(shapes, fc.double({ min: 0, max: 1, noNaN: true }), (shape, fraction) => {
        // σ = 9 px: pixels are then so fine that summing pixel centres is integrating (Poisson's summation formula).
        const centre = 700 + fraction;
        const all = weights(shape, centre, 9, shape.secondShare, 0, 1400);
        expect(Math.abs(sum(all) - 1)).toBeLessThan(1e-12);
        expect(Math.min(...all)).toBeGreaterThan(-TABLE_ERROR);
        // Summing pixel centres is off by share/π / (1 + (2πL)²) px for a two-sided exponential of L px (its kink, by the
        // same formula) and by up to half a pixel's weight at each end where a wing is cut.
        const kink =
          shape.wing === "exponential" ? shape.wingShare / Math.PI / (1 + (2 * Math.PI * 9 * shape.wingScale) ** 2) : 0;
        const cut = all[Math.ceil(centre - 9 * (shape.reach - 1))] + all[Math.floor(centre + 9 * (shape.reach - 1))];
        expect(Math.abs(sum(all.map((w, y) => w * (y - centre))))).toBeLessThan(1.1 * kink + cut + 1e-7);
      }),
      { numRuns: 60 },
    );
  });

  test("a positive offset of the wider Gaussian skews upwards", () => {
    const all = weights({ ...SKEWED, wingShare: 0 }, 400, 6, 0.2, 0, 800);
    const third = sum(all.map((w, y) => w * (y - 400) ** 3));
    // Of a mixture of two Gaussians about its mean: q(1 − q)·d·[3(r² − 1) + (1 − 2q)·d²]·σ³, from the parts' own moments.
    const [q, r, d] = [0.2, 1.6, 0.4];
    const expected = q * (1 - q) * d * (3 * (r * r - 1) + (1 - 2 * q) * d * d) * 6 ** 3;
    expect(Math.abs(third / expected - 1)).toBeLessThan(1e-6);
  });

  test("an exponential wing falls by e in its scale length, a Moffat one holds its closed-form integral", () => {
    const exponential = weights({ ...GAUSSIAN, wingShare: 0.5, wingScale: 4, reach: 60 }, 100, 1, 0, 0, 201);
    expect(Math.log(exponential[112] / exponential[116])).toBeCloseTo(1, 9);
    const moffat = weights(
      { ...GAUSSIAN, wing: "moffat", wingShare: 0.4, wingScale: 3, wingBeta: 2, reach: 40 },
      100,
      1,
      0,
      0,
      201,
    );
    // ∫ (1 + z²)⁻² dz = ½ [z/(1 + z²) + atan z].
    const primitive = (z: number) => 0.5 * (z / (1 + z * z) + Math.atan(z));
    for (const y of [108, 111, 125]) {
      const share = (primitive((y - 99.5) / 3) - primitive((y - 100.5) / 3)) / (2 * primitive(40 / 3));
      // The wing's table is cut a σ beyond the reach and normalised again: nothing remains of the difference.
      expect(Math.abs(moffat[y] / (0.4 * share) - 1)).toBeLessThan(1e-4);
    }
  });

  test("a window shows the same weights as the whole", () => {
    const whole = weights(SKEWED, 40.3, 1.1, 0.2, 0, 90);
    weights(SKEWED, 40.3, 1.1, 0.2, 33, 12).forEach((w, i) => {
      expect(Math.abs(w - whole[33 + i])).toBeLessThan(1e-14);
    });
  });
});
