/** Door to assembly/rankUpdate.ts: a growing normal matrix. */
import type { Kernels, Workbench } from "./module.js";

export class NormalMatrix {
  /** nMost × n: fill rows, then `add` them. */
  readonly rows: Float64Array;
  /** nMost */
  readonly weights: Float64Array;
  /** n × n; column ≤ row is kept up, and of the rest nothing may be believed. */
  readonly normal: Float64Array;
  private readonly bench: Workbench;

  /** n unknowns, rounded up to an even number; at most `nMost` rows are added at a time. */
  constructor(
    kernels: Kernels,
    readonly n: number,
    nMost: number,
  ) {
    if (n % 2 !== 0) throw new RangeError(`A normal matrix of ${n} unknowns; the kernel wants an even number.`);
    this.bench = kernels.workbench(8 * (nMost * n + nMost + n * n), 3);
    this.rows = this.bench.float64(nMost * n);
    this.weights = this.bench.float64(nMost);
    this.normal = this.bench.float64(n * n);
  }

  /** normal += Σ weight · row rowᵀ over the first `nRow` rows. */
  add(nRow: number): void {
    if (nRow > this.weights.length) throw new RangeError(`${nRow} rows, but there is room for ${this.weights.length}.`);
    const { rows, weights, normal, n } = this;
    this.bench.call.rankUpdate(rows.byteOffset, weights.byteOffset, nRow, n, normal.byteOffset);
  }
}
