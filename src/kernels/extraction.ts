/** Door to assembly/extract.ts: lays out one extraction's memory, runs stretches of columns, shows the spectra. */

import { MaskBit } from "../reference/bits.js";
import { marginRows } from "../reference/columns.js";
import type { ExtractionOutput, ExtractionStart, SmoothBackground } from "../reference/extract.js";
import type { ShapeTable } from "../reference/shape.js";
import type { Precision } from "./banded.js";
import type { TileKernel } from "./exports.js";
import { MethodCode, Numbers, Word } from "./extraction-words.js";
import { checkInput } from "./extractionChecks.js";
import { type Piece, type Plan, pieceType, planBytes, scratchPlan, sharedPlan } from "./extractionMemory.js";
import { borrowRoom } from "./frameRoom.js";
import type { Kernels, Workbench } from "./module.js";

/** Rows of the frame, nLane numbers each; the first nColumn lanes hold columns. */
export interface GroupRows {
  nLane: number;
  nColumn: number;
  /** e⁻, background taken off; 0 where the pixel is not good. */
  light: Float32Array | Float64Array;
  /** e⁻ */
  model: Float32Array | Float64Array;
  /** e⁻: light nearby, that a misfit of the profile is a share of. */
  reach: Float32Array | Float64Array;
  /** e⁻⁻²; 0 where the pixel is not good. */
  inverseVariance: Float32Array | Float64Array;
}

/** An extraction laid out in a memory of its own. Views stay valid as long as this lives. */
export class ExtractionBench {
  /** nSlit × nx images; rows that no fibre of the input writes to stay as they were laid out: NaN and flags 0. */
  readonly output: ExtractionOutput;
  /** ny × nx, bits of MaskBit: what was rejected so far. */
  readonly rejected: Uint8Array;
  /** nSlit × nx, e⁻ per dispersion pixel: of the joint fit, whatever the method. */
  readonly fitFlux: Float32Array | Float64Array;
  private readonly bench: Workbench;
  /** A block of words for each thread. */
  private readonly jobs: Int32Array[];
  private readonly numbers: Float64Array;
  private readonly background: Float64Array;
  private readonly pieces = new Map<Word, Piece>();
  /** The frame's memory, while this works there. */
  private borrowed: Workbench | undefined;

  /** `outputRow`: [nFibre] row of the images for each fibre of the input, of `nSlit` rows. `memory`: the frame's own, where it has
   * one; if electrons and mask lie in it, and nobody else's results do, the extraction works there.
   * @throws RangeError when lengths do not fit or the frame is larger than the memory can be. */
  constructor(
    kernels: Kernels,
    private readonly input: ExtractionStart,
    outputRow: Int32Array,
    nSlit: number,
    private readonly precision: Precision,
    memory?: Workbench,
  ) {
    checkInput(input, outputRow, nSlit);
    const nLane = precision === "f32" ? 4 : 2;
    const [shared, scratch] = [sharedPlan(input, nSlit), scratchPlan(input, nLane)];
    const nThread = kernels.nThread;
    const nBytes = planBytes(shared, precision) + nThread * (planBytes(scratch, precision) + 4 * Word.count);
    const nPieces = shared.length + nThread * (scratch.length + 1);
    const room = borrowRoom(kernels, input, memory, nBytes + 64 * nPieces);
    this.borrowed = room;
    this.bench = room ?? kernels.workbench(nBytes, nPieces);
    const { pieces } = this;
    if (room !== undefined) {
      pieces.set(Word.electrons, input.electrons);
      pieces.set(Word.mask, input.mask);
    }
    this.reserve(
      shared.filter(([word]) => !pieces.has(word)),
      pieces,
    );
    this.jobs = Array.from({ length: nThread }, (_, thread) => {
      const own: Map<Word, Piece> = thread === 0 ? pieces : new Map();
      this.reserveScratch(scratch, own);
      const job = this.bench.int32(Word.count).fill(0);
      for (const [word, piece] of [...pieces, ...own]) job[word] = piece.byteOffset;
      return job;
    });
    this.numbers = pieces.get(Word.numbers) as Float64Array;
    this.background = pieces.get(Word.background) as Float64Array;
    this.rejected = pieces.get(Word.rejected) as Uint8Array;
    this.fitFlux = pieces.get(Word.fitFlux) as Float32Array | Float64Array;
    this.output = viewOutput(pieces);
    this.copyIn(outputRow);
    const prepare = precision === "f32" ? this.bench.call.prepareExtraction32 : this.bench.call.prepareExtraction64;
    for (const job of this.jobs) prepare(job.byteOffset);
  }

  private reserve(plan: Plan, pieces: Map<Word, Piece>): void {
    for (const [word, type, length] of plan) pieces.set(word, this.bench[pieceType(type, this.precision)](length));
  }

  /** Scratch begins as zeros, as in a memory of its own. */
  private reserveScratch(plan: Plan, pieces: Map<Word, Piece>): void {
    this.reserve(plan, pieces);
    if (this.borrowed !== undefined) for (const [word] of plan) pieces.get(word)!.fill(0);
  }

  /** Gives the frame's memory back: nothing of this is valid any more. */
  release(): void {
    this.borrowed?.giveBack();
    this.borrowed = undefined;
  }

  /** Extracts columns x0 … x1 − 1; x0 must be a multiple of four. */
  run(x0 = 0, x1 = this.input.nx): void {
    this.share(this.precision === "f32" ? "extractTile32" : "extractTile64", x0, x1);
  }

  /** Takes into account, in the columns x0 … x1 − 1 that were extracted before, what has grown in `rejected` since; x0 must be
   * a multiple of four. Nothing more is rejected. */
  settleGrown(x0 = 0, x1 = this.input.nx): void {
    this.share(this.precision === "f32" ? "settleTile32" : "settleTile64", x0, x1);
  }

  private share(kernel: TileKernel, x0: number, x1: number): void {
    const { nx, blockColumns } = this.input;
    if (x0 % 4 !== 0) throw new RangeError(`Column ${x0} begins no group of four columns.`);
    if (!(x0 >= 0 && x1 <= nx)) {
      throw new RangeError(`Columns ${x0} … ${x1 - 1} asked for, but the frame has 0 … ${nx - 1}.`);
    }
    for (const job of this.jobs) {
      job[Word.firstColumn] = x0;
      job[Word.endColumn] = x1;
    }
    const [first, end] = [Math.floor(x0 / blockColumns), Math.ceil(x1 / blockColumns)];
    this.bench.share(
      kernel,
      this.jobs.map((job) => job.byteOffset),
      end - first,
      first,
    );
  }

  /** Rejection from here on: κ and the lower limit of suspects; κ = 0 takes what is rejected as it stands. */
  setRejection(kappa: number, growKappa: number): void {
    for (const job of this.jobs) job[Word.reject] = kappa > 0 ? 1 : 0;
    // A κ whose square overflows rejects nothing.
    this.numbers[Numbers.kappaSquared] = kappa * kappa;
    this.numbers[Numbers.growKappaSquared] = growKappa * growKappa;
  }

  /** ε from here on: share of the light nearby by which data may miss the model before noise. */
  setProfileError(profileError: number): void {
    this.numbers[Numbers.profileError] = profileError;
  }

  /** How one group of columns looks once its variances have settled, without any rejection: the lanes of the columns
   * from `x0` on, a multiple of four. Writes the group's spectra too. */
  inspect(x0: number): GroupRows {
    this.setRejection(Number.MAX_VALUE, Number.MAX_VALUE);
    for (const job of this.jobs) job[Word.keepReach] = 1;
    const nLane = this.precision === "f32" ? 4 : 2;
    const x1 = Math.min(x0 + nLane, this.input.nx);
    this.run(x0, x1);
    this.setRejection(this.input.kappa, this.input.growKappa);
    for (const job of this.jobs) job[Word.keepReach] = 0;
    const margin = marginRows(this.input);
    const rows = (word: Word) =>
      this.pieces.get(word)!.slice(margin * nLane, (margin + this.input.ny) * nLane) as Float32Array | Float64Array;
    const [model, wings] = [rows(Word.model), rows(Word.wingLight)];
    return {
      nLane,
      nColumn: x1 - x0,
      light: rows(Word.light),
      model: model.map((light, i) => light + wings[i]),
      reach: rows(Word.reach),
      inverseVariance: rows(Word.inverseVariance),
    };
  }

  /** Weights of all fibres at the nodes of the block that begins with `x0`: [nFibre × nNode × nWindow]. Extracts the
   * block on the way. */
  nodeWeights(x0: number): Float32Array | Float64Array {
    this.run(x0, Math.min(x0 + this.input.blockColumns, this.input.nx));
    return this.pieces.get(Word.nodeWeights)!.slice() as Float32Array | Float64Array;
  }

  /** Another background, of orders not above the first one's. */
  setBackground({ nX, nY, coefficients }: SmoothBackground): void {
    const { nX: mostX, nY: mostY } = this.input.background;
    if (nX > mostX || nY > mostY) {
      throw new RangeError(`A background of orders ${nX} × ${nY}, but there is room for ${mostX} × ${mostY}.`);
    }
    this.background.fill(0);
    for (let i = 0; i < nX; i++) {
      for (let j = 0; j < nY; j++) this.background[i * mostY + j] = coefficients[i * nY + j];
    }
  }

  private copyFrame(): void {
    const { electrons } = this.input;
    (this.pieces.get(Word.electrons) as Float32Array).set(electrons);
    const mask = this.pieces.get(Word.mask) as Uint8Array;
    mask.set(this.input.mask);
    // A value that is none spoils its whole column, marked or not. In a frame's own memory all of them are marked.
    for (let at = 0; at < mask.length; at++) {
      if (electrons[at] - electrons[at] !== 0 && mask[at] === 0) mask[at] = MaskBit.missing;
    }
  }

  /** Rows of the images that no fibre writes to; scratch, where something else has lain there. */
  private clearRows(outputRow: Int32Array): void {
    const { pieces, input } = this;
    const written = new Set(outputRow);
    const { nx } = input;
    for (const word of [Word.flux, Word.variance, Word.neighbourCovariance, Word.chi2, Word.backgroundUnder]) {
      const image = pieces.get(word)!;
      for (let row = 0; row < image.length / nx; row++) {
        if (!written.has(row)) image.fill(Number.NaN, row * nx, (row + 1) * nx);
      }
    }
    if (this.borrowed === undefined) return;
    for (const word of [Word.fitFlux, Word.flags]) {
      const image = pieces.get(word)!;
      for (let row = 0; row < image.length / nx; row++) {
        if (!written.has(row)) image.fill(0, row * nx, (row + 1) * nx);
      }
    }
  }

  private copyIn(outputRow: Int32Array): void {
    const { input, numbers, pieces } = this;
    const { noise, background } = input;
    const counts: [Word, number][] = [
      [Word.nx, input.nx],
      [Word.ny, input.ny],
      [Word.nFibre, input.nFibre],
      [Word.halfWindow, input.halfWindow],
      [Word.wing, input.wing],
      [Word.bandwidth, input.bandwidth],
      [Word.blockColumns, input.blockColumns],
      [Word.nTrace, input.nTrace],
      [Word.nWidth, input.nWidth],
      [Word.nBackgroundX, background.nX],
      [Word.nBackgroundY, background.nY],
      [Word.method, MethodCode[input.method]],
      [Word.crosstalk, input.crosstalk ? 1 : 0],
      [Word.minRounds, input.minRounds],
      [Word.maxRounds, input.maxRounds],
      [Word.fixedRows, noise.fixedVarianceImage === undefined && oneBand(noise.bandOfRow) ? 0 : -1],
    ];
    for (const job of this.jobs) for (const [word, value] of counts) job[word] = value;
    if (this.borrowed === undefined) this.copyFrame();
    const arrays: [Word, ArrayLike<number> | undefined][] = [
      [Word.bandOfRow, noise.bandOfRow],
      [Word.fixedVariance, noise.fixedVariance],
      [Word.fixedVarianceImage, noise.fixedVarianceImage],
      [Word.inverseResponse, noise.inverseResponse],
      [Word.responseRelativeVariance, noise.responseRelativeVariance],
      [Word.trace, input.trace],
      [Word.width, input.width],
      [Word.seen, input.seen],
      [Word.outputRow, outputRow],
      [Word.background, background.coefficients],
    ];
    for (const [word, values] of arrays) if (values !== undefined) pieces.get(word)!.set(values);
    if (input.rejected !== undefined) this.rejected.set(input.rejected);
    else if (this.borrowed !== undefined) this.rejected.fill(0);
    if (input.shape) pieces.get(Word.shape)!.set(packShape(input.shape));
    this.clearRows(outputRow);
    numbers[Numbers.profileError] = input.profileError;
    numbers[Numbers.halfAperture] = input.halfAperture;
    this.setRejection(input.kappa, input.growKappa);
  }
}

/** A shape as assembly/shape.ts reads it. */
function packShape(shape: ShapeTable): Float64Array {
  const { start, step, n, referenceWidth, centroid, values } = shape;
  return Float64Array.of(start, step, n, referenceWidth, ...centroid, ...values);
}

/** Whether one band holds for all rows, as where amplifiers lie side by side; then it is read once a column. */
function oneBand(bandOfRow: Uint8Array): boolean {
  return bandOfRow.every((band) => band === bandOfRow[0]);
}

function viewOutput(pieces: Map<Word, Piece>): ExtractionOutput {
  const image = (word: Word) => pieces.get(word) as Float32Array | Float64Array;
  return {
    flux: image(Word.flux),
    variance: image(Word.variance),
    neighbourCovariance: image(Word.neighbourCovariance),
    flags: pieces.get(Word.flags) as Int32Array,
    chi2: image(Word.chi2),
    background: image(Word.backgroundUnder),
  };
}
