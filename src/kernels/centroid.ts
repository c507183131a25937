/** Door to assembly/centroid.ts. */
import type { Kernels, Workbench } from "./module.js";

/** Flux-weighted centroids in one column of at most `maxRow` pixels. */
export class Centroider {
  private readonly bench: Workbench;
  private readonly data: Float64Array<ArrayBuffer>;
  private readonly good: Float64Array<ArrayBuffer>;
  private nRow = 0;

  constructor(
    kernels: Kernels,
    readonly maxRow: number,
  ) {
    this.bench = kernels.workbench(16 * maxRow, 2);
    this.data = this.bench.float64(maxRow);
    this.good = this.bench.float64(maxRow);
  }

  /** The column to measure in: `data` and `good` (1 good, 0 left out), [n]; a pixel that is left out may be NaN.
   * @throws RangeError when lengths differ or exceed `maxRow`. */
  load(data: ArrayLike<number>, good: ArrayLike<number>): void {
    if (data.length !== good.length || data.length > this.maxRow) {
      throw new RangeError(
        `${data.length} pixels and ${good.length} marks; at most ${this.maxRow} of each, and equally many.`,
      );
    }
    this.nRow = data.length;
    for (let y = 0; y < this.nRow; y++) {
      this.good[y] = good[y];
      this.data[y] = good[y] > 0 ? data[y] : 0;
    }
  }

  /** One round about `centre`; see assembly/centroid.ts. NaN when no positive light is in the window. */
  measure(centre: number, halfWidth: number, background: number): number {
    if (!(halfWidth > 0) || !Number.isFinite(centre + halfWidth + background)) {
      throw new RangeError(
        `Window of ${halfWidth} px about ${centre} over ${background}; all must be finite, the width positive.`,
      );
    }
    return this.bench.call.centroid(
      this.data.byteOffset,
      this.good.byteOffset,
      this.nRow,
      centre,
      halfWidth,
      background,
    );
  }
}
