/** The passes of an extraction over the frame, the same for kernels and reference: one over all columns that finds
 * cosmic rays; then, where their growth took further pixels, the blocks that hold them once more. */
import type { ExtractionStart } from "../reference/extract.js";
import { growRejected } from "./growth.js";

/** Reports of progress on a pass. */
const nReport = 8;

/** Whoever extracts stretches of columns: an ExtractionBench, or the reference. */
export interface ColumnRunner {
  /** ny × nx, bits of MaskBit. */
  readonly rejected: Uint8Array;
  run(x0: number, x1: number): void;
  /** Takes into account what has grown in `rejected` since `run`. */
  settleGrown(x0: number, x1: number): void;
}

/** `onProgress`: called with the share of columns done, 0 to 1. */
export function runPasses(runner: ColumnRunner, input: ExtractionStart, onProgress?: (share: number) => void): void {
  const { nx, ny, blockColumns } = input;
  const stretch = blockColumns * Math.ceil(nx / (nReport * blockColumns));
  for (let x0 = 0; x0 < nx; x0 += stretch) {
    const x1 = Math.min(x0 + stretch, nx);
    runner.run(x0, x1);
    onProgress?.(x1 / nx);
  }
  if (input.kappa === 0) return;
  growRejected(runner.rejected, nx, ny);
  runner.settleGrown(0, nx);
}
