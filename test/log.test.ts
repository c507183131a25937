import fc from "fast-check";
import { expect, test } from "vitest";
import { exp } from "../src/reference/exp.js";
import { log } from "../src/reference/log.js";

// Abramowitz & Stegun, Handbook of Mathematical Functions, table 4.2 (from memory), to the digits given; the constants of ln 2 and ln 10 are the language's.
test.each([
  [2, Math.LN2, 5e-16],
  [3, 1.09861228866811, 5e-16],
  [10, Math.LN10, 5e-16],
  [0.5, -Math.LN2, 5e-16],
  [1.01, 0.009950330853168, 5e-16],
])("ln %d is the tables' value", (x, value, half) => {
  expect(Math.abs(log(x) - value)).toBeLessThan(half + 4 * 2 ** -52 * Math.abs(value));
});

test("is what exp undoes, and 0, none or infinite where it must be", () => {
  const numbers = fc.double({ min: 1e-3, max: 1e6, noNaN: true });
  fc.assert(fc.property(numbers, (x) => Math.abs(exp(log(x)) / x - 1) < 30 * 2 ** -52));
  // Another engine's own, within both their errors.
  fc.assert(
    fc.property(numbers, (x) => Math.abs(log(x) - Math.log(x)) <= 5 * 2 ** -52 * Math.abs(Math.log(x)) + 2 ** -60),
  );
  expect([log(1), log(0), log(-1), log(Number.POSITIVE_INFINITY), log(Number.NaN)]).toEqual([
    ...[0, Number.NEGATIVE_INFINITY, Number.NaN, Number.POSITIVE_INFINITY, Number.NaN],
  ]);
});
