/** Door to assembly/columnFit.ts: a sample of a frame's columns, in groups of four neighbours, to which the fibres' light is
 * fitted: fluxes, and on request shifts and the normal equations of a smooth background. */
import type { SmoothBackground } from "../reference/extract.js";
import { legendreArgument, legendreBasis, legendreValue } from "../reference/legendre.js";
import type { ShapeTable } from "../reference/shape.js";
import { packTable, tableStride } from "./coarseTable.js";
import { ColumnNumber, ColumnWord as Word } from "./columnFit-words.js";
import { gatherColumns, type SampledFrame } from "./columnGather.js";
import { borrowRoom } from "./frameRoom.js";
import type { Kernels, Workbench } from "./module.js";

export { groupColumns, type SampledFrame } from "./columnGather.js";

/** Orders of the background that a sample can hold. */
export const mostX = 5;
export const mostY = 7;
/** Half of the window, in σ, that the normal equations look at, beyond it a profile holds hardly any light. */
const coreSigma = 4.8;
/** Rounds of a fit: variance from the data, then from the model. */
const nRound = 3;

/** Fibres, as Legendre series: src/reference/shapeProfiles.ts. */
export interface SampledLines {
  nFibre: number;
  trace: Float64Array;
  nTrace: number;
  width: Float64Array;
  nWidth: number;
}

export interface FitOptions {
  /** Indices of the groups to fit; default all. */
  groups?: Int32Array;
  background?: SmoothBackground;
  /** ε: share of the light nearby by which pixels may miss the model. */
  profileError?: number;
  /** Pixels beyond so many σ are left out, and their neighbours; 0 none. */
  clip?: number;
  /** nFibre, 1 where a fibre's light may tell its place: shifts are wanted. */
  tells?: Uint8Array;
  /** The background's normal equations are wanted. */
  normal?: boolean;
  /** What the fit leaves is wanted. */
  residual?: boolean;
}

/** Views of what a fit found; the next fit overwrites them. Number of fibre k, group g, column c: (g·nFibre + k)·4 + c. */
export interface ColumnFits {
  groups: Int32Array;
  /** e⁻ */
  flux: Float32Array;
  fluxVariance: Float32Array;
  /** Pixels, towards higher y. */
  shift: Float32Array;
  shiftVariance: Float32Array;
  /** (g·mostY·(mostY + 3)/2 + i)·4 + c: lower triangle row by row, then the right-hand side. */
  normal: Float32Array;
}

export class ColumnSample {
  readonly nx: number;
  readonly ny: number;
  readonly nGroup: number;
  private readonly bench: Workbench;
  /** The frame's memory, while this works there. */
  private borrowed: Workbench | undefined;
  private readonly numbers: Float64Array;
  private readonly jobs: Int32Array<ArrayBuffer>[];
  private readonly views: Omit<ColumnFits, "groups">;
  private readonly inputs: {
    groups: Int32Array;
    trace: Float64Array;
    width: Float64Array;
    tells: Uint8Array;
    background: Float64Array;
  };
  /** (g·ny + y)·4 + c: e⁻, NaN where a pixel is not good. */
  readonly light: Float32Array;
  /** e⁻²: the same, or (g·nBand + bandOfRow[y])·4 + c where that is given. */
  readonly fixed: Float32Array;
  readonly bandOfRow: Uint8Array | null;
  /** As `light`: e⁻² per e⁻; null: 1 everywhere. */
  readonly perElectron: Float32Array | null;
  /** As `light`: what the last fit that was asked for it left, e⁻. */
  readonly residual: Float32Array;

  /** `firstColumns`: of each group; columns beyond the frame's last count as bad. `most`: the lines that a fit may have at most,
   * all within 1.5 px of where these run or a neighbour's. `halfWindow`: pixels that profiles reach. `memory`: the frame's own,
   * to work in, if that is free, until `release`.
   * @throws RangeError when the memory cannot hold it. */
  constructor(
    kernels: Kernels,
    frame: SampledFrame,
    readonly firstColumns: Int32Array,
    private readonly most: SampledLines,
    table: ShapeTable,
    halfWindow: number,
    memory?: Workbench,
  ) {
    const { nx, ny } = frame;
    const nGroup = firstColumns.length;
    [this.nx, this.ny, this.nGroup] = [nx, ny, nGroup];
    const { nFibre } = most;
    const nWindow = 2 * halfWindow + 1;
    const nCore = 2 * Math.min(halfWindow, Math.ceil(coreSigma * widest(most))) + 1;
    const b = widestOverlap(most, nCore);
    const packed = packTable(table);
    const nPoint = packed.length / 16;
    const nNormal = (mostY * (mostY + 3)) / 2;
    const nRow = ny + 2 * (nWindow + 2);
    const { noise } = frame;
    const nBand = noise.fixedVariance.length / nx;
    const nFixed = noise.fixedVarianceImage === undefined ? nBand : ny;
    const nResponse = noise.inverseResponse === undefined ? 0 : ny;
    const scratch: [Word, number][] = [
      [Word.weights, nFibre * nWindow],
      [Word.slopes, nFibre * nWindow],
      [Word.edges, 2],
      [Word.seriesLanes, mostY],
      [Word.level, nRow],
      [Word.under, nRow],
      [Word.model, nRow],
      [Word.rest, nRow],
      [Word.inverseVariance, nRow],
      [Word.weighted, 2 * nWindow],
      [Word.band, nFibre * (b + 1)],
      [Word.step, nFibre],
      [Word.localBand, 2 * nFibre * (2 * b + 2)],
      [Word.localInverse, 2 * nFibre * (2 * b + 2)],
      [Word.localRhs, 2 * nFibre],
      [Word.projected, mostY * nFibre],
      [Word.solved, mostY * nFibre],
    ];
    const nSeries = 5 * Math.max(most.nTrace, most.nWidth, mostX);
    const ofThread = scratch.reduce((sum, [, n]) => sum + 16 * n, 4 * Word.count + 4 * nFibre + 8 * nSeries);
    const lanes = nGroup * (2 * ny + nFixed + nResponse + 4 * nFibre + nNormal);
    const ofAll =
      16 * lanes +
      8 * nGroup +
      ny +
      4 * ny * mostY +
      8 * (most.trace.length + most.width.length) +
      nFibre +
      4 * packed.length;
    const nPiece = 21 + kernels.nThread * (scratch.length + 3);
    const nBytes = ofAll + 8 * (mostX * mostY + ColumnNumber.count) + kernels.nThread * ofThread;
    this.borrowed = borrowRoom(kernels, frame, memory, nBytes + 64 * nPiece);
    this.bench = this.borrowed ?? kernels.workbench(nBytes, nPiece);
    // As in a memory of its own.
    if (this.borrowed) this.borrowed.uint8(nBytes + 64 * nPiece).fill(0);
    this.borrowed?.keepUpTo(frame.mask);
    const { bench } = this;
    const lane = (n: number) => bench.float32(4 * n);
    this.light = lane(nGroup * ny);
    this.fixed = lane(nGroup * nFixed);
    this.bandOfRow = nFixed === nBand ? bench.uint8(ny) : null;
    this.bandOfRow?.set(noise.bandOfRow);
    this.perElectron = nResponse > 0 ? lane(nGroup * ny) : null;
    this.residual = lane(nGroup * ny);
    this.views = {
      flux: lane(nGroup * nFibre),
      fluxVariance: lane(nGroup * nFibre),
      shift: lane(nGroup * nFibre),
      shiftVariance: lane(nGroup * nFibre),
      normal: lane(nGroup * nNormal),
    };
    this.inputs = {
      groups: bench.int32(nGroup),
      trace: bench.float64(most.trace.length),
      width: bench.float64(most.width.length),
      tells: bench.uint8(nFibre),
      background: bench.float64(mostX * mostY),
    };
    const first = bench.int32(nGroup);
    const polynomials = bench.float32(ny * mostY);
    const tablePiece = bench.float32(packed.length);
    const numbers = bench.float64(ColumnNumber.count);
    first.set(firstColumns);
    tablePiece.set(packed);
    fillPolynomials(polynomials, ny);
    numbers[ColumnNumber.tableStart] = table.start;
    numbers[ColumnNumber.tableStep] = table.step * tableStride(table);
    numbers[ColumnNumber.referenceWidth] = table.referenceWidth;
    numbers.set(table.centroid, ColumnNumber.centroid);
    this.numbers = numbers;
    const { flux, fluxVariance, shift, shiftVariance, normal } = this.views;
    const shared: [Word, number][] = [
      [Word.nx, nx],
      [Word.ny, ny],
      [Word.nWindow, nWindow],
      [Word.nCore, nCore],
      [Word.bandwidth, b],
      [Word.nPoint, nPoint],
      [Word.nX, mostX],
      [Word.nY, mostY],
      [Word.nRound, nRound],
      [Word.groups, this.inputs.groups.byteOffset],
      [Word.firstColumn, first.byteOffset],
      [Word.light, this.light.byteOffset],
      [Word.bandOfRow, this.bandOfRow?.byteOffset ?? 0],
      [Word.nBand, nBand],
      [Word.fixed, this.fixed.byteOffset],
      [Word.perElectron, this.perElectron?.byteOffset ?? 0],
      [Word.rowPolynomials, polynomials.byteOffset],
      [Word.trace, this.inputs.trace.byteOffset],
      [Word.width, this.inputs.width.byteOffset],
      [Word.tells, this.inputs.tells.byteOffset],
      [Word.table, tablePiece.byteOffset],
      [Word.background, this.inputs.background.byteOffset],
      [Word.flux, flux.byteOffset],
      [Word.fluxVariance, fluxVariance.byteOffset],
      [Word.shift, shift.byteOffset],
      [Word.shiftVariance, shiftVariance.byteOffset],
      [Word.normal, normal.byteOffset],
      [Word.numbers, numbers.byteOffset],
    ];
    this.jobs = Array.from({ length: bench.nThread }, () => {
      const job = bench.int32(Word.count);
      for (const [word, value] of shared) job[word] = value;
      job[Word.start] = bench.int32(nFibre).byteOffset;
      job[Word.series] = bench.float64(nSeries).byteOffset;
      for (const [word, n] of scratch) job[word] = lane(n).byteOffset;
      return job;
    });
    gatherColumns(frame, this);
  }

  /** Gives the frame's memory back: nothing of this is valid any more. */
  release(): void {
    this.borrowed?.giveBack();
    this.borrowed = undefined;
  }

  /** Fits `lines` to the groups asked for. @throws RangeError when there are more fibres than there is room for. */
  fit(lines: SampledLines, options: FitOptions = {}): ColumnFits {
    const { inputs, most } = this;
    if (lines.nFibre > most.nFibre || lines.nTrace !== most.nTrace || lines.nWidth !== most.nWidth) {
      throw new RangeError(`${lines.nFibre} fibres to fit, but there is room for ${most.nFibre} of the same series.`);
    }
    const groups = options.groups ?? Int32Array.from({ length: this.nGroup }, (_, g) => g);
    inputs.groups.set(groups);
    inputs.trace.set(lines.trace);
    inputs.width.set(lines.width);
    if (options.tells) inputs.tells.set(options.tells);
    setBackground(inputs.background, options.background);
    this.numbers[ColumnNumber.profileError] = options.profileError ?? 0;
    this.numbers[ColumnNumber.clipSquared] = (options.clip ?? 0) ** 2;
    for (const job of this.jobs) {
      job[Word.nFibre] = lines.nFibre;
      job[Word.nTrace] = lines.nTrace;
      job[Word.nWidth] = lines.nWidth;
      job[Word.wantShift] = options.tells ? 1 : 0;
      job[Word.wantBackground] = options.normal ? 1 : 0;
      job[Word.residual] = options.residual ? this.residual.byteOffset : 0;
    }
    this.bench.share(
      "fitColumns",
      this.jobs.map((job) => job.byteOffset),
      groups.length,
    );
    return { groups, ...this.views };
  }
}

/** P_j of every row. */
function fillPolynomials(into: Float32Array, ny: number): void {
  for (let y = 0; y < ny; y++) {
    const t = legendreArgument(y, ny);
    let below = 0;
    let here = 1;
    for (let j = 0; j < mostY; j++) {
      into[y * mostY + j] = here;
      const above = ((2 * j + 1) * t * here - j * below) / (j + 1);
      below = here;
      here = above;
    }
  }
}

/** Into the orders that a sample holds; higher ones are cut off. */
function setBackground(into: Float64Array, background: SmoothBackground | undefined): void {
  into.fill(0);
  if (background === undefined) return;
  const { nX, nY, coefficients } = background;
  for (let i = 0; i < Math.min(nX, mostX); i++) {
    for (let j = 0; j < Math.min(nY, mostY); j++) into[i * mostY + j] = coefficients[i * nY + j];
  }
}

function widest({ nFibre, width, nWidth }: SampledLines): number {
  let most = 0;
  for (let k = 0; k < nFibre; k++) {
    for (const t of [-1, 0, 1]) most = Math.max(most, legendreValue(width, t, k * nWidth, nWidth));
  }
  return most;
}

/** How many fibres further a core of `nCore` rows still meets; where rounding makes another one meet it by a row, nothing is lost. */
function widestOverlap({ nFibre, trace, nTrace }: SampledLines, nCore: number): number {
  let b = 0;
  for (let i = 0; i <= 4; i++) {
    const basis = legendreBasis((i - 2) / 2, nTrace);
    const y = new Float64Array(nFibre);
    for (let k = 0; k < nFibre; k++) for (let j = 0; j < nTrace; j++) y[k] += basis[j] * trace[k * nTrace + j];
    for (let k = 0; k < nFibre; k++) while (b < 12 && k > b && y[k] - y[k - b - 1] < nCore) b++;
  }
  return b;
}
