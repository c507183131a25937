/** The pieces of an extraction's memory: how many numbers of which type stand behind each word of extraction-words.ts. */
import { chunkFibres } from "../reference/chunks.js";
import { marginRows } from "../reference/columns.js";
import type { ExtractionStart } from "../reference/extract.js";
import { blockNodes } from "../reference/profile.js";
import type { Precision } from "./banded.js";
import { Numbers, Word } from "./extraction-words.js";

export type Piece = Float32Array | Float64Array | Int32Array | Uint8Array;
type PieceType = "lanes" | "float32" | "float64" | "int32" | "uint8";

/** How many numbers of which type each piece of the memory holds; `lanes` are numbers of the lanes' type. */
export type Plan = [word: Word, type: PieceType, length: number][];

/** Images of numbers; flags are another. */
const imageWords = [Word.flux, Word.variance, Word.neighbourCovariance, Word.chi2, Word.backgroundUnder, Word.fitFlux];

/** What all threads read, and the images that they write. */
export function sharedPlan(input: ExtractionStart, nSlit: number): Plan {
  const { nx, ny, nFibre, noise, background } = input;
  const nPixel = nx * ny;
  return [
    [Word.electrons, "float32", nPixel],
    [Word.mask, "uint8", nPixel],
    [Word.rejected, "uint8", nPixel],
    [Word.bandOfRow, "uint8", ny],
    [Word.fixedVariance, "float32", noise.fixedVariance.length],
    ...optional(Word.fixedVarianceImage, noise.fixedVarianceImage),
    ...optional(Word.inverseResponse, noise.inverseResponse),
    ...optional(Word.responseRelativeVariance, noise.responseRelativeVariance),
    [Word.trace, "float64", input.trace.length],
    [Word.width, "float64", input.width.length],
    [Word.seen, "int32", 2 * nFibre],
    [Word.outputRow, "int32", nFibre],
    ...(input.shape ? [[Word.shape, "float64", 11 + input.shape.values.length] as Plan[number]] : []),
    [Word.background, "float64", background.coefficients.length],
    ...imageWords.map((word): Plan[number] => [word, "lanes", nSlit * nx]),
    [Word.flags, "int32", nSlit * nx],
    [Word.numbers, "float64", Numbers.count],
  ];
}

/** Cells of assembly/erfCells.ts. */
const nErfCell = 192;

/** Bytes of all images that an extraction in single precision writes, rejected pixels included. */
export function imageBytes(nx: number, ny: number, nSlit: number): number {
  return nx * ny + 4 * nx * nSlit * (imageWords.length + 1);
}

/** What each thread has for itself. */
export function scratchPlan(input: ExtractionStart, nLane: number): Plan {
  const { ny, nFibre, bandwidth, background, wing } = input;
  const nWindow = 2 * input.halfWindow + 1;
  const nRow = ny + 2 * marginRows(input);
  const nChunk = Math.ceil(nFibre / chunkFibres);
  const nNode = blockNodes(input.blockColumns).length;
  const laneRows = [
    Word.light,
    Word.backgroundRows,
    Word.fixed,
    Word.inverseResponseRows,
    Word.responseVarianceRows,
    Word.inverseVariance,
    Word.model,
    Word.wingLight,
    Word.net,
    Word.reach,
    Word.crowd,
    Word.chiSquare,
  ];
  const perFibre: [Word, number][] = [
    [Word.weights, nWindow],
    [Word.aperture, nWindow],
    [Word.centre, 1],
    [Word.fluxes, 1],
    [Word.solution, 1],
    [Word.lastChange, 1],
    [Word.variances, 1],
    [Word.covariancesBelow, 1],
    [Word.raw, 1],
    [Word.band, bandwidth + 1],
    [Word.normal, bandwidth + 1],
    [Word.inverse, bandwidth + 1],
    [Word.rawCovariance, bandwidth + 1],
    [Word.crosstalkBand, 2 * bandwidth + 1],
    [Word.system, 2 * (2 * bandwidth + 2)],
    [Word.systemInverse, 2 * (2 * bandwidth + 2)],
    [Word.systemRhs, 2],
  ];
  return [
    [Word.start, "int32", nFibre],
    [Word.tileElectrons, "float32", 16 * ny],
    [Word.tileBits, "uint8", 16 * ny],
    [Word.tileSpectra, "lanes", 6 * 16 * nFibre],
    [Word.tileFlags, "int32", 16 * nFibre],
    [Word.shapeTable, "float64", 8 * (input.shape?.n ?? nErfCell)],
    [Word.needed, "uint8", nFibre],
    [Word.nodeCentre, "lanes", nNode * nFibre],
    [Word.nodeWeights, "lanes", nNode * nFibre * nWindow],
    [Word.wideWeights, "lanes", nWindow + 2 * wing],
    [Word.wingNodes, "lanes", 4 * nFibre * wing],
    [Word.wingWeights, "lanes", 2 * nFibre * wing],
    [Word.fibreOfRow, "int32", nRow],
    [Word.nodeShares, "lanes", nNode * input.blockColumns],
    [Word.rowPolynomials, "lanes", ny * background.nY],
    [Word.backgroundSeries, "float64", 2 * background.nY + background.nX],
    [Word.bits, "int32", nRow],
    [Word.suspects, "int32", nRow],
    [Word.candidates, "int32", 2 * nRow],
    [Word.activeChunks, "float64", 2 * nChunk],
    [Word.nextChunks, "float64", 2 * nChunk],
    ...laneRows.map((word): Plan[number] => [word, "lanes", nRow * nLane]),
    [Word.weighted, "lanes", nWindow * nLane],
    ...perFibre.map(([word, n]): Plan[number] => [word, "lanes", nFibre * n * nLane]),
    [Word.flagsOfLanes, "int32", nFibre * nLane],
  ];
}

export function pieceType(type: PieceType, precision: Precision) {
  if (type !== "lanes") return type;
  return precision === "f32" ? "float32" : "float64";
}

export function planBytes(plan: Plan, precision: Precision): number {
  const bytes = { float32: 4, float64: 8, int32: 4, uint8: 1 };
  return plan.reduce((sum, [, type, length]) => sum + bytes[pieceType(type, precision)] * length, 0);
}

function optional(word: Word, image: Float32Array | undefined): Plan {
  return image === undefined ? [] : [[word, "float32", image.length]];
}
