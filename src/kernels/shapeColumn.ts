/** Door to assembly/shapeColumn.ts and assembly/shapeNormal.ts: joint fits of single columns, each a problem of its own. */

import { legendreArgument, legendreBasis } from "../reference/legendre.js";
import type { ShapeTable } from "../reference/shape.js";
import { backgroundSeries, nBackgroundY } from "../reference/shapeBackground.js";
import type { ShapeBasis } from "../reference/shapeBasis.js";
import { type ColumnData, type ColumnFit, modelError, overlapping } from "../reference/shapeColumn.js";
import { type Lines, wholeReach } from "../reference/shapeProfiles.js";
import type { Kernels, Workbench } from "./module.js";
import { ShapeNumbers, ShapeWord } from "./shape-words.js";

/** Columns that a tile of the kernels holds. */
const nLane = 2;
const fibreNumbers = 6;
const tableNumbers = 8;

/** Columns under profiles whose centres and widths `lines` tell, with a smooth background as shapeBackground.ts has it. */
export interface ShapeProblem {
  lines: Lines;
  table: ShapeTable;
  background: Float64Array;
  columns: ColumnData[];
  /** Local unknowns of a fibre: 1 flux, 2 and shift, 3 and width. */
  nPar: number;
}

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

/** Where the windows of a problem's columns lie. */
interface Windows {
  /** nColumn × nFibre, pixels. */
  centre: Float64Array;
  width: Float64Array;
  nWindow: number;
  margin: number;
  /** How many fibres further a local window still meets another one's, in any column. */
  neighbours: number;
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
    const nThread = kernels.workbench(0).nThread;
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

/** How many f64 each piece of the memory holds. */
type Plan = [word: ShapeWord, length: number][];

function sharedPlan({ lines, table, columns, nPar }: ShapeProblem, basis?: ShapeBasis): Plan {
  const { ny, nFibre } = lines;
  const n = columns.length;
  const nBlock = (basis?.nSpline ?? 0) + 2;
  const plan: Plan = [
    [ShapeWord.light, n * ny],
    [ShapeWord.fixedVariance, n * ny],
    [ShapeWord.variancePerElectron, n * ny],
    [ShapeWord.argument, n],
    [ShapeWord.centre, n * nFibre],
    [ShapeWord.width, n * nFibre],
    [ShapeWord.backgroundSeries, n * nBackgroundY],
    [ShapeWord.rowPolynomials, ny * nBackgroundY],
    [ShapeWord.table, table.values.length],
    [ShapeWord.centroid, table.centroid.length],
    [ShapeWord.flux, n * nFibre],
    [ShapeWord.model, n * ny],
    [ShapeWord.inverseVariance, n * ny],
    [ShapeWord.solution, n * nFibre * nPar],
    [ShapeWord.solutionVariance, n * nFibre * nPar],
    [ShapeWord.chi2, 2 * n],
    [ShapeWord.numbers, ShapeNumbers.count],
  ];
  if (basis === undefined) return plan;
  return [
    ...plan,
    [ShapeWord.basis, basis.values.length + 4],
    [ShapeWord.whole, basis.nSpline],
    [ShapeWord.begun, Math.ceil(basis.begun.length / 2)],
    [ShapeWord.normal, n * 8 * nBlock * (nBlock + 1)],
  ];
}

function scratchPlan({ lines, table, nPar }: ShapeProblem, windows: Windows, basis?: ShapeBasis): Plan {
  const { ny, nFibre } = lines;
  const { nWindow, neighbours } = windows;
  const nLocal = nFibre * nPar;
  // Fluxes alone are solved for first, in the same places.
  const nBand = nLocal * nPar * (neighbours + 1);
  const plan: Plan = [
    [ShapeWord.columnTable, nLane * table.n * tableNumbers],
    [ShapeWord.first, nLane * Math.ceil(nFibre / 2) + 1],
    [ShapeWord.fibre, nLane * nFibre * fibreNumbers],
    [ShapeWord.weights, nLane * nFibre * nWindow],
    [ShapeWord.byCentre, nLane * nFibre * nWindow],
    [ShapeWord.byWidth, nLane * nFibre * nWindow],
    [ShapeWord.local, nLane * nLocal * nWindow],
    [ShapeWord.level, nLane * ny],
    [ShapeWord.rootWeight, nLane * ny],
    [ShapeWord.scaled, nLane * ny],
    [ShapeWord.band, nLane * nBand],
    [ShapeWord.inverse, nLane * nBand],
    [ShapeWord.rhs, nLane * nLocal],
  ];
  if (basis === undefined) return plan;
  const n = 4 * (basis.nSpline + 2);
  return [
    ...plan,
    [ShapeWord.edges, 2 * (basis.nSpline + 2)],
    [ShapeWord.filled, basis.nSpline + 2],
    [ShapeWord.design, ny * n],
    [ShapeWord.cross, nLocal * n],
  ];
}

function columnWindows({ lines, table, columns }: ShapeProblem): Windows {
  const { nFibre, nTrace, nWidth, trace, width } = lines;
  const { reach, localReach } = wholeReach(lines, table);
  const half = Math.ceil(reach);
  const windows: Windows = {
    centre: new Float64Array(columns.length * nFibre),
    width: new Float64Array(columns.length * nFibre),
    nWindow: 2 * half + 1,
    margin: Math.max(0, half - Math.ceil(localReach)),
    neighbours: 0,
  };
  const { nWindow: n, margin } = windows;
  columns.forEach(({ x }, i) => {
    const inX = legendreBasis(legendreArgument(x, lines.nx), Math.max(nTrace, nWidth));
    const centre = windows.centre.subarray(i * nFibre, (i + 1) * nFibre);
    for (let k = 0; k < nFibre; k++) {
      centre[k] = seriesAt(trace, k * nTrace, nTrace, inX);
      windows.width[i * nFibre + k] = seriesAt(width, k * nWidth, nWidth, inX);
    }
    const first = Int32Array.from(centre, (y) => Math.floor(y + 0.5) - half);
    windows.neighbours = Math.max(windows.neighbours, overlapping({ first, n, margin, nFibre }));
  });
  return windows;
}

function seriesAt(coef: Float64Array, from: number, n: number, polynomials: Float64Array): number {
  let sum = 0;
  for (let j = 0; j < n; j++) sum += coef[from + j] * polynomials[j];
  return sum;
}
