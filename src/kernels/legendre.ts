/** Door to assembly/legendre.ts: robust weighted Legendre fits, one or many on the same points. */
import { LegendreWord } from "./legendre-words.js";
import type { Kernels, Workbench } from "./module.js";

export interface LegendreFit {
  /** nCoef */
  coef: Float64Array<ArrayBuffer>;
  /** n: 1 for a point in use, 0 for one left out. */
  used: Uint8Array<ArrayBuffer>;
  nUsed: number;
}

/** One series to be fitted: [n]; `weight` ≥ 0, 0 for a point left out from the start, whose y may be anything. */
export interface LegendrePoints {
  y: ArrayLike<number>;
  weight: ArrayLike<number>;
}

/** Fits up to `maxSeries` series of up to `maxPoint` points with up to `maxCoef` coefficients. */
export class LegendreFitter {
  private readonly bench: Workbench;
  private readonly t: Float64Array<ArrayBuffer>;
  private readonly y: Float64Array<ArrayBuffer>;
  private readonly weight: Float64Array<ArrayBuffer>;
  private readonly coef: Float64Array<ArrayBuffer>;
  private readonly kappa: Float64Array<ArrayBuffer>;
  private readonly jobs: Int32Array<ArrayBuffer>[];

  constructor(
    kernels: Kernels,
    readonly maxPoint: number,
    readonly maxCoef: number,
    readonly maxSeries = 1,
  ) {
    const nPair = Math.ceil(maxSeries / 2);
    // One tile is one thread's, whichever takes it.
    const nThread = nPair === 1 ? 1 : kernels.nThread;
    const nScratch = 6 * maxPoint + 2 * maxCoef * (maxCoef + 1) + LegendreWord.count;
    const nShared = maxPoint * (1 + maxCoef) + 2 * nPair * (2 * maxPoint + maxCoef) + 1;
    this.bench = kernels.workbench(8 * (nShared + nThread * nScratch), 6 + 6 * nThread);
    const { bench } = this;
    this.t = bench.float64(maxPoint);
    this.y = bench.float64(2 * nPair * maxPoint);
    this.weight = bench.float64(2 * nPair * maxPoint);
    this.coef = bench.float64(2 * nPair * maxCoef);
    this.kappa = bench.float64(1);
    const basis = bench.float64(maxPoint * maxCoef);
    const scratch = Array.from({ length: nThread }, () => {
      const words = new Int32Array(LegendreWord.count);
      words[LegendreWord.kappa] = this.kappa.byteOffset;
      words[LegendreWord.t] = this.t.byteOffset;
      words[LegendreWord.basis] = basis.byteOffset;
      words[LegendreWord.y] = this.y.byteOffset;
      words[LegendreWord.weight] = this.weight.byteOffset;
      words[LegendreWord.coef] = this.coef.byteOffset;
      words[LegendreWord.given] = bench.float64(2 * maxPoint).byteOffset;
      words[LegendreWord.residual] = bench.float64(2 * maxPoint).byteOffset;
      words[LegendreWord.sorted] = bench.float64(maxPoint).byteOffset;
      words[LegendreWord.normal] = bench.float64(2 * maxCoef * maxCoef).byteOffset;
      words[LegendreWord.side] = bench.float64(2 * maxCoef).byteOffset;
      const job = bench.int32(LegendreWord.count);
      job.set(words);
      return job;
    });
    this.jobs = Array.from({ length: bench.nThread }, (_, thread) => scratch[thread] ?? scratch[0]);
  }

  /** One series; see `fitAll`. */
  fit(
    t: ArrayLike<number>,
    y: ArrayLike<number>,
    weight: ArrayLike<number>,
    nCoef: number,
    kappa = 4,
    maxRounds = 0,
  ): LegendreFit {
    return this.fitAll(t, [{ y, weight }], nCoef, kappa, maxRounds)[0];
  }

  /** Weighted least squares with points beyond `kappa` robust scatters left out in at most `maxRounds` turns
   * (0: nothing is left out). `t` in [−1, 1]: [n]. A coefficient that the points do not fix comes out as 0.
   * @throws RangeError when lengths differ or exceed the fitter's size, or a number is not finite. */
  fitAll(
    t: ArrayLike<number>,
    series: LegendrePoints[],
    nCoef: number,
    kappa: number,
    maxRounds: number,
  ): LegendreFit[] {
    const n = t.length;
    if (series.length > this.maxSeries) {
      throw new RangeError(`${series.length} series, but the fitter holds ${this.maxSeries}.`);
    }
    if (n > this.maxPoint || nCoef > this.maxCoef || nCoef < 1) {
      throw new RangeError(
        `${n} points and ${nCoef} coefficients, but the fitter holds ${this.maxPoint} and 1 to ${this.maxCoef}.`,
      );
    }
    for (let i = 0; i < n; i++) this.t[i] = Number.isFinite(t[i]) ? t[i] : 0;
    series.forEach((points, s) => {
      this.place(t, points, s);
    });
    // The last one of an odd number takes both lanes.
    if (series.length % 2 === 1) this.place(t, series[series.length - 1], series.length);
    this.kappa[0] = kappa;
    for (const job of this.jobs) {
      job[LegendreWord.nPoint] = n;
      job[LegendreWord.nCoef] = nCoef;
      job[LegendreWord.maxRounds] = maxRounds;
    }
    this.bench.call.legendreBases(this.jobs[0].byteOffset);
    const jobs = this.jobs.map((job) => job.byteOffset);
    this.bench.share("legendreFits", jobs, Math.ceil(series.length / 2));
    return series.map((_, s) => this.result(s, n, nCoef));
  }

  private result(s: number, n: number, nCoef: number): LegendreFit {
    const { coef, weight } = this;
    const first = (s >> 1) * 2;
    const lane = s & 1;
    const fit = { coef: new Float64Array(nCoef), used: new Uint8Array(n), nUsed: 0 };
    for (let j = 0; j < nCoef; j++) fit.coef[j] = coef[first * nCoef + 2 * j + lane];
    for (let i = 0; i < n; i++) {
      if (!(weight[first * n + 2 * i + lane] > 0)) continue;
      fit.used[i] = 1;
      fit.nUsed++;
    }
    return fit;
  }

  private place(t: ArrayLike<number>, points: LegendrePoints, s: number): void {
    const n = t.length;
    const { y, weight } = points;
    if (y.length !== n || weight.length !== n) {
      throw new RangeError(`t, y and weight have ${n}, ${y.length} and ${weight.length} values; they must agree.`);
    }
    const first = (s >> 1) * 2 * n + (s & 1);
    for (let i = 0; i < n; i++) {
      const w = weight[i];
      const inUse = w > 0;
      if (Number.isNaN(w) || (inUse && !Number.isFinite(t[i] + y[i] + w))) {
        throw new RangeError(
          `Point ${i} is (${t[i]}, ${y[i]}) of weight ${w}; give a point without value the weight 0.`,
        );
      }
      this.y[first + 2 * i] = inUse ? y[i] : 0;
      this.weight[first + 2 * i] = inUse ? w : 0;
    }
  }
}
