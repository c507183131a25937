/** Abramowitz & Stegun, table 26.1: Φ(0.5), Φ(1), Φ(2), Φ(3), and φ at the same places; and the handbook's erf everywhere. */
import { expect, it } from "vitest";
import { normalCumulative, normalDensity } from "../../src/calibration/normalTable.js";
import { erf } from "../../src/reference/erf.js";

it.each([
  [0, 0.5, 0.3989422804],
  [0.5, 0.6914624613, 0.3520653268],
  [1, 0.8413447461, 0.2419707245],
  [2, 0.9772498681, 0.0539909665],
  [3, 0.998650102, 0.0044318484],
])("Φ and φ at %s", (u, cumulative, density) => {
  expect(Math.abs(normalCumulative(u) - cumulative)).toBeLessThan(5e-10);
  expect(Math.abs(normalCumulative(-u) - (1 - cumulative))).toBeLessThan(5e-10);
  expect(Math.abs(normalDensity(u) - density)).toBeLessThan(5e-10);
});

it("is good to 1e-9 between its knots", () => {
  for (let u = -7.3; u < 7.3; u += 0.00737) {
    expect(Math.abs(normalCumulative(u) - 0.5 - 0.5 * erf(u / Math.SQRT2))).toBeLessThan(1e-9);
    expect(Math.abs(normalDensity(u) - Math.exp(-0.5 * u * u) / Math.sqrt(2 * Math.PI))).toBeLessThan(1e-9);
  }
  expect([normalCumulative(-40), normalCumulative(40), normalDensity(9)]).toEqual([0, 1, 0]);
});
