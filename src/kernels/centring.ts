/** Door to assembly/centring.ts: two columns of one frame are centred at once. */
import type { Kernels, Workbench } from "./module.js";

export interface CentringColumn {
  /** nRow */
  data: ArrayLike<number>;
  /** nRow: inverse variance, 0 for a pixel left out (which may be NaN). */
  weight: ArrayLike<number>;
  /** nFibre, ascending: where the centres are thought to be, pixels. */
  centre: ArrayLike<number>;
  /** nFibre: σ > 0, pixels. */
  sigma: ArrayLike<number>;
}

export interface CentringSize {
  nRow: number;
  nFibre: number;
  /** Fibres at most this many places apart overlap. */
  neighbours: number;
  /** A fibre's light ends this far from its centre, pixels. */
  reach: number;
  /** Legendre terms of the background over the rows. */
  nBack: number;
}

export interface CentringResult {
  /** nFibre × nPar: a (light), u = a·δ (shift) and, with nPar = 3, s = a·δσ (widening). */
  solution: Float64Array<ArrayBuffer>;
  /** nFibre × nPar: their variances for a known background. */
  variance: Float64Array<ArrayBuffer>;
  /** nRow: the linear model, background included. */
  model: Float64Array<ArrayBuffer>;
  /** nBack */
  background: Float64Array<ArrayBuffer>;
}

/** Joint linearised centring of all fibres, columns in pairs. */
export class Centring {
  private readonly bench: Workbench;
  private readonly views: Record<
    "data" | "weight" | "centre" | "sigma" | "solution" | "variance" | "model" | "background" | "scratch",
    Float64Array<ArrayBuffer>
  >;

  constructor(
    kernels: Kernels,
    readonly size: CentringSize,
  ) {
    const { nRow, nFibre, neighbours, reach, nBack } = size;
    if (!(nRow >= 1 && nFibre >= 1 && neighbours >= 0 && reach > 0 && reach < 1000 && nBack >= 0)) {
      throw new RangeError(
        `No centring with ${JSON.stringify(size)}: counts and reach must be positive, reach below 1000.`,
      );
    }
    const nScratch = kernels.workbench(0).call.centringScratchBytes(nRow, nFibre, 3, neighbours, reach, nBack) / 8;
    const nNumber = 2 * (3 * nRow + 8 * nFibre + nBack) + nScratch;
    this.bench = kernels.workbench(8 * nNumber, 9);
    const pairs = (n: number) => this.bench.float64(2 * n);
    this.views = {
      data: pairs(nRow),
      weight: pairs(nRow),
      centre: pairs(nFibre),
      sigma: pairs(nFibre),
      solution: pairs(3 * nFibre),
      variance: pairs(3 * nFibre),
      model: pairs(nRow),
      background: pairs(nBack),
      scratch: this.bench.float64(nScratch),
    };
  }

  /** Centres one or two columns. Unknowns without light come out as 0 with variance 0.
   * @throws RangeError when a length does not fit the size given, or a centre or width is not finite. */
  measure(columns: CentringColumn[], nPar: 2 | 3): CentringResult[] {
    const { nRow, nFibre, neighbours, reach, nBack } = this.size;
    const v = this.views;
    if (columns.length < 1 || columns.length > 2)
      throw new RangeError(`${columns.length} columns; centre one or two at once.`);
    for (let lane = 0; lane < 2; lane++) this.place(columns[Math.min(lane, columns.length - 1)], lane);
    this.bench.call.centreFibres(
      v.data.byteOffset,
      v.weight.byteOffset,
      nRow,
      v.centre.byteOffset,
      v.sigma.byteOffset,
      nFibre,
      nPar,
      neighbours,
      reach,
      nBack,
      v.solution.byteOffset,
      v.variance.byteOffset,
      v.model.byteOffset,
      v.background.byteOffset,
      v.scratch.byteOffset,
    );
    return columns.map((_, l) => ({
      solution: laneOf(v.solution, nFibre * nPar, l),
      variance: laneOf(v.variance, nFibre * nPar, l),
      model: laneOf(v.model, nRow, l),
      background: laneOf(v.background, nBack, l),
    }));
  }

  private place(column: CentringColumn, lane: number): void {
    const { nRow, nFibre } = this.size;
    const { data, weight, centre, sigma } = column;
    if (data.length !== nRow || weight.length !== nRow || centre.length !== nFibre || sigma.length !== nFibre) {
      throw new RangeError(
        `Column of ${data.length} pixels, ${weight.length} weights, ${centre.length} centres and ${sigma.length} widths, ` +
          `but ${nRow}, ${nRow}, ${nFibre} and ${nFibre} are needed.`,
      );
    }
    for (let y = 0; y < nRow; y++) {
      const inUse = weight[y] > 0 && Number.isFinite(data[y]);
      this.views.data[2 * y + lane] = inUse ? data[y] : 0;
      this.views.weight[2 * y + lane] = inUse ? weight[y] : 0;
    }
    for (let k = 0; k < nFibre; k++) {
      if (!(Math.abs(centre[k]) < 1e6 && sigma[k] > 0 && sigma[k] < 1e6)) {
        throw new RangeError(
          `Fibre ${k + 1} has centre ${centre[k]} and σ ${sigma[k]}; both must be finite, σ positive.`,
        );
      }
      this.views.centre[2 * k + lane] = centre[k];
      this.views.sigma[2 * k + lane] = sigma[k];
    }
  }
}

/** Every second number, from `lane` on. */
function laneOf(view: Float64Array, n: number, lane: number): Float64Array<ArrayBuffer> {
  const out = new Float64Array(n);
  for (let i = 0; i < n; i++) out[i] = view[2 * i + lane];
  return out;
}
