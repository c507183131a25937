// The readable reference, opened as the kernels are.
import { extractColumns } from "../dist/reference/extract.js";

/** The readable reference, with images of its own.
 * @param {import("../dist/reference/extract.js").ExtractionInput} input */
export function openReference(input) {
  const n = input.nFibre * input.nx;
  const numbers = () => new Float64Array(n).fill(Number.NaN);
  const images = { flux: numbers(), variance: numbers(), neighbourCovariance: numbers() };
  const output = { ...images, flags: new Int32Array(n), chi2: numbers(), background: numbers() };
  const rejected = new Uint8Array(input.electrons.length);
  const run = () => {
    rejected.fill(0);
    extractColumns({ ...input, rejected }, output, 0, input.nx);
    return output.flux[0];
  };
  return { run, output, rejected };
}
