import { bench, describe } from "vitest";
import { growRejected } from "../src/extraction/growth.js";
import type { Precision } from "../src/kernels/banded.js";
import { ExtractionBench } from "../src/kernels/extraction.js";
import { loadKernels } from "../src/kernels/module.js";
import type { ExtractionInput } from "../src/reference/extract.js";
import { runReference } from "../test/runs.js";
import { makeScene } from "../test/scene.js";
import { printMachine, sink } from "./machine.js";

const kernels = await loadKernels();

printMachine("extract");

function open(input: ExtractionInput, precision: Precision): ExtractionBench {
  const rows = Int32Array.from({ length: input.nFibre }, (_, k) => k);
  return new ExtractionBench(kernels, input, rows, input.nFibre, precision);
}

const sizes = [
  [16, 128],
  [48, 256],
  [96, 512],
] as const;

describe.each(sizes)("joint extraction of %d fibres × %d columns, rejection on", (nFibre, nx) => {
  const scene = makeScene({ nFibre, nx, ny: 30 + 5 * nFibre });
  const input: ExtractionInput = { ...scene.input, kappa: 5, growKappa: 2.5 };
  const [f64, f32] = [open(input, "f64"), open(input, "f32")];
  const expected = runReference(input);
  for (const [kernel, bound] of [
    [f64, 1e-9],
    [f32, 1e-2],
  ] as const) {
    kernel.run();
    let nFar = 0;
    expected.flux.forEach((flux, i) => {
      const error = Math.abs(kernel.output.flux[i] - flux) / Math.sqrt(expected.variance[i]);
      if (!(error < bound) && !Number.isNaN(flux)) nFar++;
    });
    // In f32 a pixel at the threshold may fall to the other side, which moves the fibres of that column.
    if (nFar > (kernel === f64 ? 0 : 1e-3 * expected.flux.length)) throw new Error(`extract: ${nFar} answers differ`);
  }
  const options = { time: 500, iterations: 3, warmupTime: 50, warmupIterations: 1 };
  const run = (kernel: ExtractionBench) => {
    kernel.rejected.fill(0);
    kernel.run();
    sink.sum += kernel.output.flux[0];
  };
  bench("kernel f64", () => run(f64), options);
  bench("kernel f32", () => run(f32), options);
  bench("reference", () => void (sink.sum += runReference(input).flux[0]), options);
});

describe.each(sizes)("beside it, of %d fibres × %d columns", (nFibre, nx) => {
  const scene = makeScene({ nFibre, nx, ny: 30 + 5 * nFibre });
  const input: ExtractionInput = { ...scene.input, kappa: 5, growKappa: 2.5 };
  const first = open(input, "f64");
  first.run();
  const marks = first.rejected.slice();
  const options = { time: 300 };
  bench("copies in and out, f32", () => void (sink.sum += open(input, "f32").output.flux.slice().length), options);
  bench("growth of rejections", () => void (sink.sum += growRejected(marks.slice(), nx, input.ny)[0]), options);
});
