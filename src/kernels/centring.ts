/** Door to assembly/centring.ts: all columns of a frame that are to be centred, two of them at once. */
import type { CentringColumn, CentringGuess, CentringRounds, CentringShape } from "../reference/centring.js";
import { legendreArgument, legendreBasis } from "../reference/legendre.js";
import { CentringNumber, CentringWord } from "./centring-words.js";
import type { Kernels, Workbench } from "./module.js";

export interface CentringSize extends CentringShape {
  nRow: number;
  nFibre: number;
  nColumn: number;
}

export interface CentringResult {
  /** nFibre × nPar: a (light), u = a·δ (shift) and, with nPar = 3, s = a·δσ (widening). */
  solution: Float64Array<ArrayBuffer>;
  /** nFibre × nPar: their variances for a known background. */
  variance: Float64Array<ArrayBuffer>;
  /** nBack */
  background: Float64Array<ArrayBuffer>;
}

/** Sums over pixels in use of Σ r², Σ v of noise alone and Σ m², how many they are, and how many unknowns were found. */
export interface Misfit {
  residual: number;
  noise: number;
  light: number;
  nPixel: number;
  nUnknown: number;
}

/** Two columns go in the lanes of one pair while no fibre moves by more than this between them, pixels. */
const MAX_APART = 4;
const MOST_PAR = 3;

type Rows = "data" | "good" | "fixedVariance" | "variancePerElectron" | "model";
type Views = Record<Rows | "centre" | "sigma" | "solution" | "variance" | "background" | "misfit", Float64Array>;

/** Joint linearised centring of all fibres in columns that stay where they were put between one call and the next. */
export class Centring {
  private readonly bench: Workbench;
  private readonly views: Views;
  private readonly words: Int32Array;
  private readonly numbers: Float64Array;
  private readonly jobs: Int32Array[];
  private nPar = MOST_PAR;

  /** @throws RangeError for a size without sense. */
  constructor(
    kernels: Kernels,
    readonly size: CentringSize,
  ) {
    const { nRow, nFibre, neighbours, reach, nBack, nColumn } = size;
    if (!(nRow >= 1 && nFibre >= 1 && nColumn >= 1 && neighbours >= 0 && reach > 0 && reach < 1000 && nBack >= 0)) {
      throw new RangeError(
        `No centring with ${JSON.stringify(size)}: counts and reach must be positive, reach below 1000.`,
      );
    }
    const nPair = Math.ceil(nColumn / 2);
    const n = MOST_PAR * nFibre;
    const nWindow = windowRows(reach, MAX_APART);
    const nBand = n * MOST_PAR * (neighbours + 1);
    const scratch = {
      [CentringWord.weight]: nRow,
      [CentringWord.first]: nFibre,
      [CentringWord.edges]: nWindow + 1,
      [CentringWord.basis]: n * nWindow,
      [CentringWord.weighted]: MOST_PAR * nWindow,
      [CentringWord.sums]: MOST_PAR * MOST_PAR,
      [CentringWord.band]: nBand,
      [CentringWord.inverse]: nBand,
      [CentringWord.border]: n * nBack,
      [CentringWord.sides]: n * (nBack + 1),
      [CentringWord.schur]: nBack * (nBack + 1),
    };
    const nScratch = Object.values(scratch).reduce((sum, length) => sum + length, CentringWord.count);
    const nShared = nPair * (5 * nRow + 2 * nFibre + 2 * n + nBack + 5) + nRow * nBack + CentringNumber.count;
    // One pair is one thread's, whichever takes it.
    const nThread = nPair === 1 ? 1 : kernels.nThread;
    this.bench = kernels.workbench(16 * (nShared + nThread * nScratch), 14 * (nThread + 1));
    const pairs = (length: number) => this.bench.float64(2 * nPair * length);
    this.views = {
      data: pairs(nRow),
      good: pairs(nRow),
      fixedVariance: pairs(nRow).fill(1),
      variancePerElectron: pairs(nRow),
      model: pairs(nRow),
      centre: pairs(nFibre),
      sigma: pairs(nFibre).fill(1),
      solution: pairs(n),
      variance: pairs(n),
      background: pairs(nBack),
      misfit: pairs(5),
    };
    const rowBasis = this.bench.float64(nRow * nBack);
    for (let y = 0; y < nRow; y++) {
      if (nBack > 0) rowBasis.set(legendreBasis(legendreArgument(y, nRow), nBack), y * nBack);
    }
    this.numbers = this.bench.float64(CentringNumber.count);
    this.words = new Int32Array(CentringWord.count);
    this.words[CentringWord.nRow] = nRow;
    this.words[CentringWord.nFibre] = nFibre;
    this.words[CentringWord.neighbours] = neighbours;
    this.words[CentringWord.nBack] = nBack;
    for (const [name, view] of Object.entries(this.views)) {
      this.words[CentringWord[name as keyof typeof CentringWord]] = view.byteOffset;
    }
    this.words[CentringWord.rowBasis] = rowBasis.byteOffset;
    this.words[CentringWord.numbers] = this.numbers.byteOffset;
    const jobs = Array.from({ length: nThread }, () => {
      for (const [word, length] of Object.entries(scratch)) {
        this.words[Number(word)] = this.bench.float64(2 * length).byteOffset;
      }
      const job = this.bench.int32(CentringWord.count);
      job.set(this.words);
      return job;
    });
    this.jobs = Array.from({ length: this.bench.nThread }, (_, t) => jobs[t] ?? jobs[0]);
  }

  /** Puts a column in its place; the first weights come from its data.
   * @throws RangeError when a length does not fit. */
  place(column: number, { data, good, fixedVariance, variancePerElectron }: CentringColumn): void {
    const { nRow } = this.size;
    const lengths = [data, good, fixedVariance, variancePerElectron].map(({ length }) => length);
    if (lengths.some((length) => length !== nRow)) {
      throw new RangeError(`Column of ${lengths.join(", ")} pixels, marks and variances, but ${nRow} each are needed.`);
    }
    for (const at of this.lanesOf(column, nRow)) {
      for (let y = 0; y < nRow; y++) {
        const inUse = good[y] > 0 && Number.isFinite(data[y]);
        const i = at + 2 * y;
        this.views.data[i] = inUse ? data[y] : 0;
        this.views.model[i] = this.views.data[i];
        this.views.good[i] = inUse ? 1 : 0;
        this.views.fixedVariance[i] = inUse ? fixedVariance[y] : 1;
        this.views.variancePerElectron[i] = inUse ? variancePerElectron[y] : 0;
      }
    }
  }

  /** Where the fibres of a column are thought to be.
   * @throws RangeError when a length does not fit, or a centre or width is not finite. */
  guess(column: number, { centre, sigma }: CentringGuess): void {
    const { nFibre } = this.size;
    if (centre.length !== nFibre || sigma.length !== nFibre) {
      throw new RangeError(`${centre.length} centres and ${sigma.length} widths, but ${nFibre} each are needed.`);
    }
    for (let k = 0; k < nFibre; k++) {
      if (!(Math.abs(centre[k]) < 1e6 && sigma[k] > 0 && sigma[k] < 1e6)) {
        throw new RangeError(
          `Fibre ${k + 1} has centre ${centre[k]} and σ ${sigma[k]}; both must be finite, σ positive.`,
        );
      }
    }
    for (const at of this.lanesOf(column, nFibre)) {
      for (let k = 0; k < nFibre; k++) {
        this.views.centre[at + 2 * k] = centre[k];
        this.views.sigma[at + 2 * k] = sigma[k];
      }
    }
  }

  /** Centres the columns of every `pairStep`-th pair, the first one's included. Unknowns without light come out as 0 with
   * variance 0. A fibre that is thought to move by over 4 px between the columns of a pair is seen about its middle only. */
  measure(rounds: CentringRounds, pairStep = 1): void {
    const { reach, nColumn } = this.size;
    const nPair = Math.ceil(nColumn / 2);
    const apart = Math.min(MAX_APART, this.farthestApart(pairStep));
    this.nPar = rounds.nPar;
    this.numbers[CentringNumber.reach] = reach;
    this.numbers[CentringNumber.near] = rounds.near;
    this.numbers[CentringNumber.relativeError] = rounds.relativeError;
    this.numbers[CentringNumber.kappa] = rounds.kappa;
    this.numbers[CentringNumber.rejectError] = rounds.rejectError;
    for (const job of this.jobs) {
      job[CentringWord.nPar] = rounds.nPar;
      job[CentringWord.nWindow] = windowRows(reach, apart);
      job[CentringWord.pairStep] = pairStep;
      job[CentringWord.nRound] = rounds.nRound;
      job[CentringWord.reject] = rounds.kappa > 0 ? 1 : 0;
    }
    const jobs = this.jobs.map((job) => job.byteOffset);
    this.bench.share("centreColumns", jobs, Math.ceil(nPair / pairStep));
  }

  /** What the last measurement found in one of its columns. */
  result(column: number): CentringResult {
    const n = this.size.nFibre * this.nPar;
    return {
      solution: this.laneOf(this.views.solution, column, n),
      variance: this.laneOf(this.views.variance, column, n),
      background: this.laneOf(this.views.background, column, this.size.nBack),
    };
  }

  /** nRow: the linear model of a column, background included. */
  model(column: number): Float64Array<ArrayBuffer> {
    return this.laneOf(this.views.model, column, this.size.nRow);
  }

  /** nRow: 0 for a pixel left out. */
  good(column: number): Float64Array<ArrayBuffer> {
    return this.laneOf(this.views.good, column, this.size.nRow);
  }

  misfit(column: number): Misfit {
    const [residual, noise, light, nPixel, nUnknown] = this.laneOf(this.views.misfit, column, 5);
    return { residual, noise, light, nPixel, nUnknown };
  }

  /** Where a column's numbers begin in an array of `length` a pair; the last one without a neighbour takes both lanes. */
  private lanesOf(column: number, length: number): number[] {
    const first = (column >> 1) * 2 * length + (column & 1);
    const isAlone = column === this.size.nColumn - 1 && (column & 1) === 0;
    return isAlone ? [first, first + 1] : [first];
  }

  private laneOf(view: Float64Array, column: number, length: number): Float64Array<ArrayBuffer> {
    const [first] = this.lanesOf(column, length);
    const out = new Float64Array(length);
    for (let i = 0; i < length; i++) out[i] = view[first + 2 * i];
    return out;
  }

  private farthestApart(pairStep: number): number {
    const { nFibre, nColumn } = this.size;
    const { centre } = this.views;
    let most = 0;
    for (let pair = 0; pair < Math.ceil(nColumn / 2); pair += pairStep) {
      for (let at = 2 * pair * nFibre; at < 2 * (pair + 1) * nFibre; at += 2) {
        most = Math.max(most, Math.abs(centre[at + 1] - centre[at]));
      }
    }
    return most;
  }
}

/** Rows about the whole row nearest to the middle of two centres, so that both have ± reach. */
function windowRows(reach: number, apart: number): number {
  return 2 * Math.ceil(reach + 0.5 * apart + 0.5) + 1;
}
