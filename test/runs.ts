/** The same extraction through kernel and reference, for tests that hold both against an outside truth. */
import type { Precision } from "../src/kernels/banded.js";
import { ExtractionBench } from "../src/kernels/extraction.js";
import { loadKernels } from "../src/kernels/module.js";
import { type ExtractionInput, type ExtractionOutput, extractColumns } from "../src/reference/extract.js";

export type Result = ExtractionOutput & { rejected: Uint8Array };

const kernels = await loadKernels();

export function runKernel(input: ExtractionInput, precision: Precision = "f64"): Result {
  const rows = Int32Array.from({ length: input.nFibre }, (_, k) => k);
  const bench = new ExtractionBench(kernels, input, rows, input.nFibre, precision);
  bench.run();
  return { ...bench.output, rejected: bench.rejected };
}

export function runReference(input: ExtractionInput): Result {
  const n = input.nFibre * input.nx;
  const numbers = () => new Float64Array(n).fill(Number.NaN);
  const output = {
    flux: numbers(),
    variance: numbers(),
    neighbourCovariance: numbers(),
    flags: new Int32Array(n),
    chi2: numbers(),
    background: numbers(),
  };
  const rejected = input.rejected.slice();
  extractColumns({ ...input, rejected }, output, 0, input.nx);
  return { ...output, rejected };
}

/** Both, with their names for messages. */
export function runBoth(input: ExtractionInput): [string, Result][] {
  return [
    ["reference", runReference(input)],
    ["kernel", runKernel(input)],
  ];
}
