/** Door to assembly/rankUpdate.ts: a growing normal matrix. */
import type { Kernels, Workbench } from "./module.js";

/** Where the kernel keeps N[row][column], row ≥ column: in blocks of 4 × 4. */
export function blockIndex(row: number, column: number): number {
  const [i, j] = [row >> 2, column >> 2];
  return 16 * ((i * (i + 1)) / 2 + j) + 4 * (row & 3) + (column & 3);
}

export class NormalMatrix {
  /** nMost × n: fill rows, then `add` them. */
  readonly rows: Float64Array;
  /** Blocks as `blockIndex` counts them. */
  readonly blocks: Float64Array;
  private readonly bench: Workbench;
  private readonly nBlock: number;
  private readonly filled: Int32Array;

  /** n unknowns, four to a block; at most `nMost` rows are added at a time. */
  constructor(
    kernels: Kernels,
    readonly n: number,
    private readonly nMost: number,
  ) {
    if (n % 4 !== 0) throw new RangeError(`A normal matrix of ${n} unknowns; the kernel wants a multiple of 4.`);
    this.nBlock = n / 4;
    const nNumber = 8 * this.nBlock * (this.nBlock + 1);
    this.bench = kernels.workbench(8 * (nMost * n + nNumber) + n, 3);
    this.rows = this.bench.float64(nMost * n);
    this.blocks = this.bench.float64(nNumber);
    this.filled = this.bench.int32(this.nBlock);
  }

  /** N += sign · Σ row rowᵀ over the first `nRow` rows. */
  add(nRow: number, sign: 1 | -1): void {
    if (nRow > this.nMost) throw new RangeError(`${nRow} rows, but there is room for ${this.nMost}.`);
    const { rows, blocks, filled } = this;
    this.bench.call.rankUpdate(rows.byteOffset, nRow, this.nBlock, sign, blocks.byteOffset, filled.byteOffset);
  }
}
