import { describe, expect, test } from "vitest";
import { logFactorial, poisson } from "../../src/random/poisson.js";
import { openStream } from "../../src/random/streams.js";
import { judgeMissing, python } from "../judges.js";

const N = 200_000;

function sample(mean: number): Float64Array {
  const stream = openStream(12, "poisson", mean);
  return new Float64Array(N).map(() => poisson(stream, mean));
}

describe("Poisson numbers", () => {
  test("nothing comes from a mean of nothing", () => {
    const stream = openStream(1, "nothing");
    expect([poisson(stream, 0), poisson(stream, -3), poisson(stream, Number.NaN)]).toEqual([0, 0, 0]);
  });

  test("a mean beyond all counting is refused", () => {
    expect(() => poisson(openStream(1, "x"), Infinity)).toThrow(
      "Poisson mean: found Infinity, at most 1e12 can be drawn; lower it",
    );
  });

  // 9.999 and 10.001 stand on either side of the change of method.
  test.each([0.03, 0.7, 3.2, 9.999, 10.001, 37.4, 812.6, 9.1e4, 3.3e6])(
    "mean, variance and third moment for λ = %f",
    (mean) => {
      const numbers = sample(mean);
      const central = (p: number) => numbers.reduce((total, k) => total + (k - mean) ** p, 0) / N;
      // Central moments λ, λ, λ + 3λ², …: Johnson, Kemp & Kotz 2005, Univariate Discrete Distributions, section 4.3.
      const fourth = mean + 3 * mean ** 2;
      const sixth = mean + 25 * mean ** 2 + 15 * mean ** 3;
      expect(Math.abs(central(1)) / Math.sqrt(mean / N)).toBeLessThan(4.4);
      expect(Math.abs(central(2) - mean) / Math.sqrt((fourth - mean ** 2) / N)).toBeLessThan(4.4);
      expect(Math.abs(central(3) - mean) / Math.sqrt((sixth - mean ** 2) / N)).toBeLessThan(4.4);
    },
  );

  test("whole numbers, never negative", () => {
    for (const mean of [0.4, 10.5, 250]) {
      expect(sample(mean).every((k) => Number.isInteger(k) && k >= 0)).toBe(true);
    }
  });

  test("χ² of Poisson(3.2) against e^−λ λ^k / k!", () => {
    const counts = new Float64Array(11);
    for (const k of sample(3.2)) counts[Math.min(10, k)]++;
    let chiSquare = 0;
    let left = 1;
    let probability = Math.exp(-3.2);
    for (let k = 0; k <= 10; k++) {
      const expected = N * (k < 10 ? probability : left);
      chiSquare += (counts[k] - expected) ** 2 / expected;
      left -= probability;
      probability *= 3.2 / (k + 1);
    }
    // 0.1 % point, 10 degrees of freedom: Abramowitz & Stegun, table 26.8.
    expect(chiSquare).toBeLessThan(29.588);
  });

  test.skipIf(judgeMissing("scipy"))("χ² against scipy.stats.poisson over its whole range", () => {
    for (const mean of [0.7, 9.999, 10.001, 37.4, 812.6, 9.1e4]) {
      const counts = new Map<number, number>();
      for (const k of sample(mean)) counts.set(k, (counts.get(k) ?? 0) + 1);
      const p = Number(python(CHI_SQUARE, [String(mean), JSON.stringify([...counts])]));
      expect(p, `λ = ${mean}`).toBeGreaterThan(1e-4);
      expect(p, `λ = ${mean}`).toBeLessThan(1 - 1e-4);
    }
  });

  test("ln k! from its definition", () => {
    let exact = 0;
    for (let k = 1; k <= 400; k++) {
      exact += Math.log(k);
      // 1e-11 is the series' first neglected term, 1/(1188 z⁹), at z = 17, plus rounding of the sum.
      expect(Math.abs(logFactorial(k) - exact)).toBeLessThan(1e-11 + 400 * 2 ** -52 * exact);
    }
  });
});

/** Cells of equal probability, about 40 of them; the p-value of the counts. */
const CHI_SQUARE = `
import json, sys, numpy as np
from scipy import stats
mean = float(sys.argv[1]); counts = dict(json.loads(sys.argv[2])); n = sum(counts.values())
edges = np.unique(stats.poisson.ppf(np.linspace(0.025, 0.975, 39), mean))
expected = np.diff(np.concatenate([[0], stats.poisson.cdf(edges, mean), [1]])) * n
found = np.zeros(len(expected))
for k, c in counts.items(): found[np.searchsorted(edges, k)] += c
print(stats.chi2.sf(((found - expected) ** 2 / expected).sum(), len(expected) - 1))
`;
