import { expect, test } from "vitest";
import { alignFrames } from "../../src/calibration/alignFrames.js";
import { grantedMisfit, sharedVariance, varianceSlope } from "../../src/calibration/sharedModel.js";
import { spectraOf } from "./products.js";
import { frameOf, productOf, READ_VARIANCE } from "./stacks.js";

const size: [number, number] = [2, 800];

test("the slope of variance with a frame's own noise is found, per electron of the fibre's light", () => {
  const frames = alignFrames(
    Array.from({ length: 5 }, (_, i) => frameOf(size, () => 60, `slope ${i}`)),
    0.05,
  );
  expect(varianceSlope(frames, 0, 800)).toBeCloseTo(1, 2);
  // Divided by a throughput t flux goes as 1/t and variance as 1/t²: the slope as 1/t.
  for (const frame of frames) {
    frame.spectra.flux = frame.spectra.flux.map((value) => value / 0.4);
    frame.information = frame.information.map((value) => value / 0.16);
  }
  expect(varianceSlope(frames, 0, 800)).toBeCloseTo(2.5, 1);
  // Variances that follow nothing.
  const even = alignFrames(
    [1, 2].map((i) =>
      productOf(
        `even ${i}`,
        spectraOf(...size, (k, x) => 50 + ((x + i + k) % 5)),
      ),
    ),
    0.05,
  );
  expect(varianceSlope(even, 0, 800)).toBeCloseTo(0, 9);
});

test("at the shared light all frames of a point have the same variance, whichever way each scattered", () => {
  const frames = alignFrames(
    Array.from({ length: 3 }, (_, i) => frameOf(size, () => 4, `same ${i}`, { sky: 3 })),
    0.05,
  );
  for (const frame of frames) {
    for (let at = 0; at < 800; at++) {
      expect(sharedVariance(frame, at, 4, 1)).toBeCloseTo(READ_VARIANCE + 7, 5);
    }
  }
});

test("what frames may differ by is a hundredth of the light, and a twentieth of its range nearby", () => {
  const model = Float64Array.from([100, 100, 100, 100, 1100, 100, 100, 100, Number.NaN, 100]);
  const misfit = new Float64Array(10);
  grantedMisfit(model, misfit);
  expect(misfit[0]).toBeCloseTo(1, 12);
  expect(misfit[2]).toBeCloseTo(1 + 50 ** 2, 9);
  expect(misfit[4]).toBeCloseTo(11 ** 2 + 50 ** 2, 9);
  expect(misfit[7]).toBeCloseTo(1, 12);
  expect(misfit[8]).toBeCloseTo(0, 12);
});
