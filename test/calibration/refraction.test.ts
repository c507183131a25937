/** Published pairs of air and vacuum wavelengths. Those of nebular and stellar lines are the tables in common use in galaxy
 * spectroscopy, two or three decimals, from memory; sodium D after Steck, Sodium D Line Data (vacuum) and the NIST Atomic Spectra Database
 * (air); the helium-neon laser's from metrology's list of radiations (vacuum) and the NIST database (air). Tolerance: half of the last digit
 * printed, of either side. */
import fc from "fast-check";
import { describe, expect, it } from "vitest";
import { airToVacuum, MEASURED_RANGE, refractiveIndex, vacuumToAir } from "../../src/calibration/refraction.js";

const PAIRS: [air: number, vacuum: number, tolerance: number][] = [
  [3933.66, 3934.777, 0.006],
  [4861.325, 4862.683, 0.001],
  [4958.911, 4960.295, 0.001],
  [5006.843, 5008.24, 0.001],
  [6548.05, 6549.86, 0.01],
  [6562.8, 6564.61, 0.01],
  [6583.45, 6585.27, 0.01],
  [6716.44, 6718.29, 0.01],
  [8542.09, 8544.44, 0.01],
  [5889.95095, 5891.58326, 0.0003],
  [5895.92424, 5897.55815, 0.0003],
  [6328.1646, 6329.9141, 0.0007],
];

describe("refraction of standard air", () => {
  it.each(PAIRS)("%f in air is %f in vacuum", (air, vacuum, tolerance) => {
    expect(Math.abs(airToVacuum(air) - vacuum)).toBeLessThan(tolerance);
    expect(Math.abs(vacuumToAir(vacuum) - air)).toBeLessThan(tolerance);
  });

  it("is Ciddor's dispersion at 5875.6 Å, worked by hand", () => {
    // σ² = 2.896588: 5792105/235.121912 + 167917/54.465412 = 24634.475 + 3082.984
    expect(1e8 * (refractiveIndex(5875.6) - 1)).toBeCloseTo(27717.46, 1);
  });

  it("goes back where it came from", () => {
    fc.assert(
      fc.property(fc.double({ min: 2000, max: 24990, noNaN: true }), (air) => {
        expect(Math.abs(vacuumToAir(airToVacuum(air)) - air)).toBeLessThan(1e-10);
      }),
    );
  });

  it("is refused where it is not known", () => {
    expect(() => airToVacuum(1999)).toThrow(
      "1999 Å in air cannot be turned into the other medium: the refraction of air is known from 2000 to 25000 Å; below, tables give vacuum wavelengths only.",
    );
    expect(() => vacuumToAir(1215.67)).toThrow(RangeError);
    expect(() => vacuumToAir(Number.POSITIVE_INFINITY)).toThrow(RangeError);
    expect(airToVacuum(Number.NaN)).toBeNaN();
    expect(MEASURED_RANGE).toEqual([2300, 16900]);
  });
});
