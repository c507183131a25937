/** Door to assembly/legendre.ts: robust weighted Legendre fits, many of them in one memory. */
import type { Kernels, Workbench } from "./module.js";

export interface LegendreFit {
  /** nCoef */
  coef: Float64Array<ArrayBuffer>;
  /** n: 1 for a point in use, 0 for one left out. */
  used: Uint8Array<ArrayBuffer>;
  nUsed: number;
}

/** Fits up to `maxPoint` points with up to `maxCoef` coefficients. */
export class LegendreFitter {
  private readonly bench: Workbench;
  private readonly t: Float64Array<ArrayBuffer>;
  private readonly y: Float64Array<ArrayBuffer>;
  private readonly weight: Float64Array<ArrayBuffer>;
  private readonly coef: Float64Array<ArrayBuffer>;
  private readonly scratch: Float64Array<ArrayBuffer>;

  constructor(
    kernels: Kernels,
    readonly maxPoint: number,
    readonly maxCoef: number,
  ) {
    const nScratch = maxCoef * (maxCoef + 2) + 2 * maxPoint;
    this.bench = kernels.workbench(8 * (3 * maxPoint + maxCoef + nScratch), 5);
    this.t = this.bench.float64(maxPoint);
    this.y = this.bench.float64(maxPoint);
    this.weight = this.bench.float64(maxPoint);
    this.coef = this.bench.float64(maxCoef);
    this.scratch = this.bench.float64(nScratch);
  }

  /** Weighted least squares with points beyond `kappa` robust scatters left out in at most `maxRounds` turns
   * (0: nothing is left out). `t` in [−1, 1], `weight` ≥ 0 (0: left out from the start): [n].
   * A coefficient that the points do not fix comes out as 0.
   * @throws RangeError when lengths differ or exceed the fitter's size, or a number is not finite. */
  fit(
    t: ArrayLike<number>,
    y: ArrayLike<number>,
    weight: ArrayLike<number>,
    nCoef: number,
    kappa = 4,
    maxRounds = 0,
  ): LegendreFit {
    const n = t.length;
    if (y.length !== n || weight.length !== n) {
      throw new RangeError(`t, y and weight have ${n}, ${y.length} and ${weight.length} values; they must agree.`);
    }
    if (n > this.maxPoint || nCoef > this.maxCoef || nCoef < 1) {
      throw new RangeError(
        `${n} points and ${nCoef} coefficients, but the fitter holds ${this.maxPoint} and 1 to ${this.maxCoef}.`,
      );
    }
    for (let i = 0; i < n; i++) this.place(i, t[i], y[i], weight[i]);
    const pointers = [this.t, this.y, this.weight].map((view) => view.byteOffset) as [number, number, number];
    const nUsed = this.bench.call.legendreFitClipped(
      ...pointers,
      n,
      nCoef,
      kappa,
      maxRounds,
      this.coef.byteOffset,
      this.scratch.byteOffset,
    );
    return {
      coef: this.coef.slice(0, nCoef),
      used: Uint8Array.from(this.weight.subarray(0, n), (w) => (w > 0 ? 1 : 0)),
      nUsed,
    };
  }

  private place(i: number, t: number, y: number, weight: number): void {
    const inUse = weight > 0;
    if (Number.isNaN(weight) || (inUse && !Number.isFinite(t + y + weight))) {
      throw new RangeError(`Point ${i} is (${t}, ${y}) of weight ${weight}; give a point without value the weight 0.`);
    }
    this.t[i] = inUse ? t : 0;
    this.y[i] = inUse ? y : 0;
    this.weight[i] = inUse ? weight : 0;
  }
}
