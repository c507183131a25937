import { expect, test } from "vitest";
import { inMedium } from "../../src/calibration/medium.js";

// Published line tables, from memory: 5006.843 → 5008.240 Å, 6562.80 → 6564.61 Å.
test("a product's wavelengths go to vacuum and back, those that are none stay none", () => {
  const air = { medium: "air" as const, image: Float64Array.of(5006.843, Number.NaN, 6562.8) };
  const vacuum = inMedium(air, "vacuum");
  expect(vacuum.medium).toBe("vacuum");
  expect(vacuum.image[0]).toBeCloseTo(5008.24, 2);
  expect(vacuum.image[1]).toBeNaN();
  expect(vacuum.image[2]).toBeCloseTo(6564.61, 2);
  inMedium(vacuum, "air").image.forEach((value, i) => {
    if (i !== 1) expect(value).toBeCloseTo(air.image[i], 9);
  });
  expect(inMedium(air, "air")).toBe(air);
});

test("beyond the refraction that is known they are refused", () => {
  const far = { medium: "vacuum" as const, image: Float64Array.of(1500) };
  expect(() => inMedium(far, "air")).toThrow("1500 Å in vacuum cannot be turned into the other medium");
});
