import { expect, test } from "vitest";
import { pixelEdges, pixelPositions } from "../../src/calibration/pixelEdges.js";

const cubic = (x: number) => 5000 + 1.7 * x + 3e-4 * x * x - 2e-7 * x ** 3;
const middles = (sign: number) => Float64Array.from({ length: 60 }, (_, x) => cubic(sign > 0 ? x : 59 - x));

test.each([1, -1])("a cubic's edges are its values half way, its direction %d", (sign) => {
  pixelEdges(middles(sign), 1)!.forEach((edge, i) => {
    expect(Math.abs(edge - cubic(sign > 0 ? i - 0.5 : 59.5 - i))).toBeLessThan(1e-11);
  });
});

test.each([1, -1])("positions undo them, also beyond the ends, direction %d", (sign) => {
  const edges = pixelEdges(middles(sign), 1)!;
  const wavelengths = Float64Array.from({ length: 240 }, (_, i) => cubic(-2 + i / 3.9));
  pixelPositions(edges, wavelengths).forEach((position, i) => {
    const true_ = sign > 0 ? -2 + i / 3.9 : 61 - i / 3.9;
    // Within a pixel λ is taken as linear: λ''/λ'/8 = 4e-5 pixels at most; beyond the ends more.
    const beyond = Math.max(0, -0.5 - true_, true_ - 59.5);
    expect(Math.abs(position - true_)).toBeLessThan(5e-5 + 1e-3 * beyond);
  });
});

test("rows without wavelengths have none, and those that turn round are refused", () => {
  expect(pixelEdges(new Float64Array(9).fill(Number.NaN), 1)).toBeUndefined();
  const turning = Float64Array.from([1, 2, 3, 3, 4, 5]);
  expect(() => pixelEdges(turning, 12)).toThrow(
    "The wavelengths of fibre 12 turn round or stop at column 4; calibrate the frame again.",
  );
  turning[2] = Number.NaN;
  expect(() => pixelEdges(turning, 12)).toThrow("at column 3;");
});
