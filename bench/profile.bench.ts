import { bench, describe } from "vitest";
import { loadKernels } from "../src/kernels/module.js";
import { gaussianWeights as kernelWeights } from "../src/kernels/profile.js";
import { blockProfiles, columnWeights, gaussianWeights, nodeShares } from "../src/reference/profile.js";
import { makeScene } from "../test/scene.js";
import { printMachine, sink } from "./machine.js";

const kernels = await loadKernels();
const nWindow = 13;

printMachine("profile");

describe.each([50, 200, 800])("windows of 13 pixels for %d fibres", (n) => {
  const centre = (k: number) => 7.3 + 4.917 * k;
  const first = (k: number) => Math.floor(centre(k) + 0.5) - 6;
  for (let k = 0; k < n; k++) {
    const found = kernelWeights(kernels, centre(k), 1.04, first(k), nWindow);
    gaussianWeights(centre(k), 1.04, first(k), nWindow).forEach((weight, i) => {
      if (!(Math.abs(weight - found[i]) < 1e-14)) throw new Error("profile: answers differ");
    });
  }
  const options = { time: 400 };
  bench(
    "kernel f64, a call a window",
    () => {
      for (let k = 0; k < n; k++) sink.sum += kernelWeights(kernels, centre(k), 1.04, first(k), nWindow)[6];
    },
    options,
  );
  bench(
    "reference",
    () => {
      for (let k = 0; k < n; k++) sink.sum += gaussianWeights(centre(k), 1.04, first(k), nWindow)[6];
    },
    options,
  );
});

describe.each([20, 80, 320])("profiles of %d fibres in 16 columns, reference", (nFibre) => {
  const { input } = makeScene({ nFibre, nx: 16, ny: 30 + 5 * nFibre }, false);
  const options = { time: 400 };
  bench(
    "four nodes and a cubic",
    () => {
      const block = blockProfiles(input, 0);
      for (let x = 0; x < 16; x++) sink.sum += columnWeights(block, nWindow, nodeShares(16, x))[6];
    },
    options,
  );
  bench(
    "every column exactly",
    () => {
      for (let x0 = 0; x0 < 16; x0 += 4) sink.sum += blockProfiles({ ...input, blockColumns: 4 }, x0).weights[6];
    },
    options,
  );
});
