import fc from "fast-check";
import { beforeAll, describe, expect, it } from "vitest";
import { LegendreFitter } from "../src/kernels/legendre.js";
import { type Kernels, loadKernels } from "../src/kernels/module.js";
import { legendreFit, legendreFitClipped, legendreValue } from "../src/reference/legendre.js";
import { judgeMissing, python } from "./judges.js";

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

/** Values of the monomials' series Σ b_i xⁱ from the Legendre coefficients on x = 10 (t + 1): P_j expanded by Bonnet's recurrence. */
function monomials(coef: ArrayLike<number>): number[] {
  const inT: number[][] = [[1], [0, 1]];
  for (let j = 1; j + 1 < coef.length; j++) {
    const above = new Array(j + 2).fill(0);
    inT[j].forEach((p, i) => {
      above[i + 1] += ((2 * j + 1) * p) / (j + 1);
    });
    inT[j - 1].forEach((p, i) => {
      above[i] -= (j * p) / (j + 1);
    });
    inT.push(above);
  }
  const sums = new Array(coef.length).fill(0);
  // t = x/10 − 1 by Horner's scheme on polynomials in x.
  const power = Array.from(coef, (_, i) => inT.slice(0, coef.length).reduce((s, p, j) => s + coef[j] * (p[i] ?? 0), 0));
  let poly: number[] = [];
  for (const c of power.reverse()) {
    const next = new Array(poly.length + 1).fill(0);
    poly.forEach((p, i) => {
      next[i] -= p;
      next[i + 1] += p / 10;
    });
    next[0] += c;
    poly = next;
  }
  poly.slice(0, coef.length).forEach((p, i) => {
    sums[i] = p;
  });
  return sums;
}

const wampler = Array.from({ length: 21 }, (_, x) => x);
const wamplerT = wampler.map((x) => x / 10 - 1);

describe("Legendre fit against NIST StRD linear regression (certified coefficients)", () => {
  it("Wampler1: y = Σ xⁱ, i = 0…5: all coefficients 1", () => {
    const y = wampler.map((x) => [0, 1, 2, 3, 4, 5].reduce((s, i) => s + x ** i, 0));
    const fitter = new LegendreFitter(kernels, 21, 6);
    for (const coef of [
      fitter.fit(
        wamplerT,
        y,
        y.map(() => 1),
        6,
      ).coef,
      legendreFit(
        wamplerT,
        y,
        y.map(() => 1),
        6,
      ),
    ]) {
      // 21 values up to 3.4e6 carry 4e-10 each; the change of basis multiplies that by some 10² at the constant term.
      monomials(coef).forEach((b) => {
        expect(Math.abs(b - 1)).toBeLessThan(1e-7);
      });
    }
  });

  it("Wampler2: y = Σ (x/10)ⁱ, i = 0…5: coefficients 0.1ⁱ", () => {
    const y = wampler.map((x) => [0, 1, 2, 3, 4, 5].reduce((s, i) => s + (x / 10) ** i, 0));
    const fitter = new LegendreFitter(kernels, 21, 6);
    for (const coef of [
      fitter.fit(
        wamplerT,
        y,
        y.map(() => 1),
        6,
      ).coef,
      legendreFit(
        wamplerT,
        y,
        y.map(() => 1),
        6,
      ),
    ]) {
      monomials(coef).forEach((b, i) => {
        expect(Math.abs(b / 0.1 ** i - 1)).toBeLessThan(1e-11);
      });
    }
  });
});

describe.skipIf(judgeMissing("scipy"))("Legendre series against numpy.polynomial.legendre", () => {
  it("fits weighted data as legfit does (whose weights multiply residuals: √weight)", () => {
    const t = Array.from({ length: 57 }, (_, i) => -0.97 + (i * 1.91) / 56 + 0.003 * ((i * 7) % 5));
    const y = t.map((v, i) => 412.7 + 31 * v - 8 * v * v + 0.6 * v ** 3 + 0.05 * ((i * 37) % 11));
    const w = t.map((_, i) => 1 + ((i * 13) % 7));
    const script =
      "import json,sys,numpy as np;a=json.loads(sys.argv[1]);" +
      "c=np.polynomial.legendre.legfit(a['t'],a['y'],7,w=np.sqrt(a['w']));" +
      "print(json.dumps([c.tolist(),np.polynomial.legendre.legval(0.3172,c)]))";
    const [coef, value] = JSON.parse(python(script, [JSON.stringify({ t, y, w })]));
    const own = new LegendreFitter(kernels, 57, 8).fit(t, y, w, 8).coef;
    const scale = 412.7;
    for (let j = 0; j < 8; j++) expect(Math.abs(own[j] - coef[j])).toBeLessThan(1e-12 * scale);
    expect(Math.abs(legendreValue(own, 0.3172) - value)).toBeLessThan(1e-12 * scale);
  });
});

describe("robust fit", () => {
  const point = fc.record({
    t: fc.double({ min: -1, max: 1, noNaN: true }),
    noise: fc.double({ min: -1, max: 1, noNaN: true }),
    weight: fc.double({ min: 0.5, max: 4, noNaN: true }),
  });

  it("agrees between kernel (normal equations) and reference (QR) to 1e-10 of the data's size", () => {
    fc.assert(
      fc.property(
        fc.array(point, { minLength: 40, maxLength: 90 }),
        fc.integer({ min: 1, max: 5 }),
        (points, nCoef) => {
          // One point in each stretch of [−1, 1], so that the coefficients are fixed.
          const t = points.map((p, i) => -1 + (2 * (i + 0.5 + 0.4 * p.t)) / points.length);
          // A scatter of its own, so that shrinking cannot leave rounding as the only scatter.
          const y = points.map(
            (p, i) => 900 + 40 * t[i] + 0.02 * p.noise + 0.004 * (((i * 17) % 7) - 3) + (i % 11 === 3 ? 7.3 : 0),
          );
          const w = points.map((p) => p.weight);
          const own = new LegendreFitter(kernels, 90, 5).fit(t, y, w, nCoef, 4, 10);
          const reference = legendreFitClipped(t, y, w, nCoef, 4, 10);
          expect([...own.used]).toEqual([...reference.used]);
          own.coef.forEach((c, j) => {
            expect(Math.abs(c - reference.coef[j])).toBeLessThan(1e-10 * 900);
          });
        },
      ),
    );
  });

  it("gives each of many series what it gives it alone, bit for bit", () => {
    const t = Array.from({ length: 40 }, (_, i) => -1 + i / 20);
    // Five series, an odd number, of which each has other outliers, holes and scatter: they settle in other turns.
    const noise = (i: number) => ((i * 7919) % 1013) / 1013 - 0.5;
    const series = [0, 1, 2, 3, 4].map((s) => ({
      y: t.map((v, i) => s + v * v + 0.02 * noise(i + 40 * s) + ((i + s) % 13 === 3 ? 0.04 * (s + 1) * (i % 5) : 0)),
      weight: t.map((_, i) => (i % 11 === s ? 0 : 1 + ((i * s) % 3))),
    }));
    const all = new LegendreFitter(kernels, 40, 5, 5).fitAll(t, series, 4, 3, 10);
    series.forEach(({ y, weight }, s) => {
      expect(all[s]).toEqual(new LegendreFitter(kernels, 40, 5).fit(t, y, weight, 4, 3, 10));
      expect([...all[s].used]).toEqual([...legendreFitClipped(t, y, weight, 4, 3, 10).used]);
    });
    expect(new Set(all.map(({ used }) => used.join(""))).size).toBe(5);
    expect(() => new LegendreFitter(kernels, 40, 5, 4).fitAll(t, series, 4, 3, 10)).toThrow(
      "5 series, but the fitter holds 4",
    );
  });

  it("leaves out exactly the outliers and returns the line through the rest", () => {
    const t = Array.from({ length: 31 }, (_, i) => -1 + i / 15);
    const y = t.map((v, i) => 5 + 2 * v + 0.001 * (((i * 17) % 7) - 3));
    y[4] += 0.9;
    y[22] -= 40;
    const fit = new LegendreFitter(kernels, 31, 2).fit(
      t,
      y,
      t.map(() => 3),
      2,
      5,
      10,
    );
    expect([...fit.used].flatMap((u, i) => (u ? [] : [i]))).toEqual([4, 22]);
    expect(fit.nUsed).toBe(29);
    expect(Math.abs(fit.coef[0] - 5)).toBeLessThan(0.001);
    expect(Math.abs(fit.coef[1] - 2)).toBeLessThan(0.001);
  });

  it("sets a coefficient that the points do not fix to 0", () => {
    const fit = new LegendreFitter(kernels, 3, 4).fit([-0.5, 0.5, 0.9], [1, 3, 77], [1, 1, 0], 4);
    expect([...fit.coef]).toEqual([2, 2, 0, 0]);
  });

  it("refuses unequal lengths, too many points, and a point without value", () => {
    const fitter = new LegendreFitter(kernels, 3, 2);
    expect(() => fitter.fit([0, 1], [1], [1, 1], 1)).toThrow("t, y and weight have 2, 1 and 2 values");
    expect(() => fitter.fit([0, 0, 0, 0], [1, 1, 1, 1], [1, 1, 1, 1], 1)).toThrow("4 points and 1 coefficients");
    expect(() => fitter.fit([0, 1], [1, Number.NaN], [1, 1], 1)).toThrow("give a point without value the weight 0");
  });
});
