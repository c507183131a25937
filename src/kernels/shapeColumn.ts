/** Door to assembly/shapeColumn.ts and assembly/shapeNormal.ts: joint fits of single columns, each a problem of its own. */
import { legendreArgument, legendreBasis } from "../reference/legendre.js";
import { backgroundSeries, nBackgroundY } from "../reference/shapeBackground.js";
import type { ShapeBasis } from "../reference/shapeBasis.js";
import { type ColumnFit, modelError } from "../reference/shapeColumn.js";
import type { Kernels, Workbench } from "./module.js";
import { ShapeNumbers, ShapeWord } from "./shape-words.js";
import {
  columnWindows,
  nLane,
  type Plan,
  type ShapeProblem,
  scratchPlan,
  sharedPlan,
  type Windows,
} from "./shapeMemory.js";

/** Fits every column on its own: fluxes with the variances that follow from them, then what the residual adds to the local
 * unknowns. The answers are views of a memory of their own. */
export function fitShapeColumns(kernels: Kernels, problem: ShapeProblem): ColumnFit[] {
  const laid = new ShapeColumnBench(kernels, problem, 0);
  laid.run("fitShapeColumns");
  const { nFibre, ny } = problem.lines;
  return problem.columns.map(({ x }, i) => ({
    x,
    flux: laid.answer(ShapeWord.flux, i, nFibre),
    model: laid.answer(ShapeWord.model, i, ny),
    inverseVariance: laid.answer(ShapeWord.inverseVariance, i, ny),
    solution: laid.answer(ShapeWord.solution, i, nFibre * problem.nPar),
    variance: laid.answer(ShapeWord.solutionVariance, i, nFibre * problem.nPar),
  }));
}

/** A problem laid out in memory. `basis`: functions whose coefficients' normal equations are wanted. */
export class ShapeColumnBench {
  private readonly bench: Workbench;
  private readonly jobs: Int32Array[];
  private readonly answers = new Map<ShapeWord, Float64Array>();

  constructor(
    kernels: Kernels,
    private readonly problem: ShapeProblem,
    clip: number,
    basis?: ShapeBasis,
  ) {
    const windows = columnWindows(problem);
    const shared = sharedPlan(problem, basis);
    const own = scratchPlan(problem, windows, basis);
    const nThread = kernels.nThread;
    const bytes = (plan: Plan) => plan.reduce((sum, [, length]) => sum + 8 * length, 0);
    const nJob = 4 * ShapeWord.count;
    this.bench = kernels.workbench(
      bytes(shared) + nThread * (bytes(own) + nJob),
      shared.length + nThread * (own.length + 1),
    );
    for (const [word, length] of shared) this.answers.set(word, this.bench.float64(length));
    this.jobs = Array.from({ length: nThread }, () => {
      const job = this.bench.int32(ShapeWord.count);
      for (const [word, view] of this.answers) job[word] = view.byteOffset;
      for (const [word, length] of own) job[word] = this.bench.float64(length).byteOffset;
      this.fillCounts(job, windows, basis);
      return job;
    });
    this.copyIn(windows, clip, basis);
  }

  run(kernel: "fitShapeColumns" | "shapeNormals"): void {
    const jobs = this.jobs.map((job) => job.byteOffset);
    this.bench.share(kernel, jobs, Math.ceil(this.problem.columns.length / nLane));
  }

  /** `n` numbers of column `i`. */
  answer(word: ShapeWord, i: number, n: number): Float64Array {
    return this.answers.get(word)!.subarray(i * n, (i + 1) * n);
  }

  private fillCounts(job: Int32Array, { nWindow, margin, neighbours }: Windows, basis?: ShapeBasis): void {
    const { lines, table, columns, nPar } = this.problem;
    job[ShapeWord.nColumn] = columns.length;
    job[ShapeWord.ny] = lines.ny;
    job[ShapeWord.nFibre] = lines.nFibre;
    job[ShapeWord.nWindow] = nWindow;
    job[ShapeWord.margin] = margin;
    job[ShapeWord.neighbours] = neighbours;
    job[ShapeWord.nPar] = nPar;
    job[ShapeWord.nTable] = table.n;
    job[ShapeWord.nSpline] = basis?.nSpline ?? 0;
    job[ShapeWord.nBackground] = nBackgroundY;
  }

  private copyIn({ centre, width }: Windows, clip: number, basis?: ShapeBasis): void {
    const { lines, table, background, columns } = this.problem;
    const { nx, ny } = lines;
    const at = (word: ShapeWord) => this.answers.get(word)!;
    const variance = at(ShapeWord.fixedVariance);
    columns.forEach(({ x, light, good, fixedVariance, variancePerElectron }, i) => {
      at(ShapeWord.light).set(light, i * ny);
      at(ShapeWord.variancePerElectron).set(variancePerElectron, i * ny);
      for (let y = 0; y < ny; y++) {
        variance[i * ny + y] = good[y] === 0 ? Number.POSITIVE_INFINITY : fixedVariance[y];
      }
      at(ShapeWord.argument)[i] = legendreArgument(x, nx);
      at(ShapeWord.backgroundSeries).set(backgroundSeries(background, x, nx), i * nBackgroundY);
    });
    for (let y = 0; y < ny; y++) {
      at(ShapeWord.rowPolynomials).set(legendreBasis(legendreArgument(y, ny), nBackgroundY), y * nBackgroundY);
    }
    at(ShapeWord.centre).set(centre);
    at(ShapeWord.width).set(width);
    at(ShapeWord.table).set(table.values);
    at(ShapeWord.centroid).set(table.centroid);
    const numbers = at(ShapeWord.numbers);
    numbers[ShapeNumbers.tableStart] = table.start;
    numbers[ShapeNumbers.tableStep] = table.step;
    numbers[ShapeNumbers.referenceWidth] = table.referenceWidth;
    numbers[ShapeNumbers.modelError] = modelError;
    numbers[ShapeNumbers.clip] = clip;
    if (basis === undefined) return;
    at(ShapeWord.basis).set(basis.values);
    at(ShapeWord.whole).set(basis.whole);
    const begun = at(ShapeWord.begun);
    new Int32Array(begun.buffer, begun.byteOffset, basis.begun.length).set(basis.begun);
  }
}
