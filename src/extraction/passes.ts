/** The passes of an extraction over the frame, the same for kernels and reference: one over all columns that finds
 * cosmic rays; then, where their growth took further pixels, the blocks that hold them once more. */
import type { ExtractionInput } from "../reference/extract.js";
import { growRejected } from "./growth.js";

/** Columns between two reports of progress; a multiple of every block. */
const stretchColumns = 64;

/** Whoever extracts stretches of columns: an ExtractionBench, or the reference. */
export interface ColumnRunner {
  /** ny × nx, bits of MaskBit. */
  readonly rejected: Uint8Array;
  run(x0: number, x1: number): void;
  setRejection(kappa: number, growKappa: number): void;
}

/** `onProgress`: called with the share of columns done, 0 to 1. */
export function runPasses(runner: ColumnRunner, input: ExtractionInput, onProgress?: (share: number) => void): void {
  const { nx, ny, blockColumns } = input;
  for (let x0 = 0; x0 < nx; x0 += stretchColumns) {
    const x1 = Math.min(x0 + stretchColumns, nx);
    runner.run(x0, x1);
    onProgress?.(x1 / nx);
  }
  if (input.kappa === 0) return;
  const changed = growRejected(runner.rejected, nx, ny);
  runner.setRejection(0, 0);
  for (let x0 = 0; x0 < nx; x0 += blockColumns) {
    const x1 = Math.min(x0 + blockColumns, nx);
    if (changed.subarray(x0, x1).includes(1)) runner.run(x0, x1);
  }
}
