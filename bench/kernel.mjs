// How the kernels are opened and run for timing: the one file to change when their door does.
import { ExtractionBench } from "../dist/kernels/extraction.js";
import { loadKernels } from "../dist/kernels/module.js";
import { profileTable } from "../dist/tramlines/profileTable.js";

/** @typedef {import("../dist/reference/extract.js").ExtractionInput} ExtractionInput */

export const kernels = await loadKernels();

/** Whether an extraction can be shared by two threads. */
export const canShare = false;

/** An extraction laid out in its memory, copies done; `run` extracts all columns anew.
 * @param {ExtractionInput} input @param {"f32" | "f64"} precision */
export function openExtraction(input, precision, _nThread = 1) {
  const rows = Int32Array.from({ length: input.nFibre }, (_, k) => k);
  const bench = new ExtractionBench(kernels, input, rows, input.nFibre, precision);
  const run = () => {
    bench.rejected.fill(0);
    bench.run();
    return bench.output.flux[0];
  };
  return { run, output: bench.output, rejected: bench.rejected, model: bench.model };
}

/** The same Gaussians told by a table, as a measured profile is: what a profile of any form costs on the same windows.
 * @param {ExtractionInput} input @returns {ExtractionInput} */
export function withShape(input) {
  const gaussian = { kind: "gaussian", sigma: input.width, widthDegree: input.nWidth - 1, relativeError: 0 };
  return { ...input, shape: profileTable(kernels, /** @type {any} */ (gaussian)) };
}
