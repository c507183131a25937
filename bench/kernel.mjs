// How the kernels are opened and run for timing: the one file to change when their door does.
import { ExtractionBench } from "../dist/kernels/extraction.js";
import { loadKernels, useThreads } from "../dist/kernels/module.js";
import { nShapeTerm } from "../dist/reference/shape.js";
import { profileTable } from "../dist/tramlines/profileTable.js";

/** @typedef {import("../dist/reference/extract.js").ExtractionInput} ExtractionInput */

export const kernels = await loadKernels();
const shared = await onTwoThreads(loadKernels);

/** Whether an extraction can be shared by two threads. */
export const canShare = shared.nThread === 2;

/** What `work` comes to when the library is told to take two threads. @template T @param {() => Promise<T>} work */
export async function onTwoThreads(work) {
  useThreads(2);
  try {
    return await work();
  } finally {
    useThreads(1);
  }
}

/** An extraction laid out in its memory, copies done; `run` extracts all columns anew.
 * @param {ExtractionInput} input @param {"f32" | "f64"} precision */
export function openExtraction(input, precision, { nThread = 1 } = {}) {
  const rows = Int32Array.from({ length: input.nFibre }, (_, k) => k);
  const bench = new ExtractionBench(nThread === 2 ? shared : kernels, input, rows, input.nFibre, precision);
  const run = () => {
    bench.rejected.fill(0);
    bench.run();
    return bench.output.flux[0];
  };
  return { run, output: bench.output, rejected: bench.rejected };
}

/** The same Gaussians told by a table, as a measured profile is: what a profile of any form costs on the same windows.
 * @param {ExtractionInput} input @returns {ExtractionInput} */
export function withShape(input) {
  const gaussian = { kind: "gaussian", sigma: input.width, widthDegree: input.nWidth - 1, relativeError: 0 };
  return { ...input, shape: profileTable(kernels, /** @type {any} */ (gaussian)) };
}

/** A table with far wings, as a measured profile has: 2 % of the light falls off exponentially over 4 σ each side, known on
 * 12 rows beside the windows. @param {ExtractionInput} input @returns {ExtractionInput} */
export function withWings(input) {
  const core = withShape(input).shape;
  const [reach, perUnit, share, scale] = [20, Math.round(1 / core.step), 0.02, 4];
  const n = 2 * reach * perUnit + 1;
  const values = new Float64Array(n * 2 * nShapeTerm);
  for (let i = 0; i < n; i++) {
    const v = -reach + i / perUnit;
    const below = Math.min(Math.max(Math.round((v - core.start) / core.step), 0), core.n - 1) * 2 * nShapeTerm;
    const falling = Math.exp(-Math.abs(v) / scale) / 2;
    values[i * 2 * nShapeTerm] = (1 - share) * core.values[below] + share * (v < 0 ? falling : 1 - falling);
    values[i * 2 * nShapeTerm + nShapeTerm] = (1 - share) * core.values[below + nShapeTerm] + (share * falling) / scale;
  }
  return { ...input, wing: 12, shape: { ...core, start: -reach, n, values } };
}
