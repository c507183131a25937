/** Images that only say which pixels are meant: those that are not 0. Few are, and images of bytes are read piece by piece, so
 * that a large one takes no room. */
import { basename } from "node:path";
import { checksum } from "../kernels/checksum.js";
import { type Kernels, loadKernels } from "../kernels/module.js";
import { addChecksums } from "./checksum.js";
import { decodeImage, type FitsImage, type FoundImage, imageIn, type ReadOptions, warnOfChecksums } from "./image.js";
import { checkSums, type OpenFits, sumOfData, withFits } from "./open.js";

/** Small enough to stay in cache; a whole number of words. */
const PIECE_BYTES = 1 << 18;

export interface FitsMask extends Pick<FitsImage, "nx" | "ny" | "name" | "checksum" | "warnings"> {
  /** Numbers, y · nx + x, of the pixels that are not 0 or have no value; rising. */
  pixels: number[];
}

/** One image as a mask. `input`: as for `readImage`.
 * @throws FitsError as `readImage`. */
export function readMask(input: string | Uint8Array, options: ReadOptions = {}): Promise<FitsMask> {
  return withFits(input, options.name, async (fits) => {
    const image = imageIn(fits, options);
    const kernels = await loadKernels();
    const { bitpix, zero, blank } = image.scaling;
    const plain = !image.compressed && bitpix === 8 && zero === 0 && blank === undefined;
    const { pixels, dataSum } = plain ? readBytes(kernels, fits, image) : readValues(kernels, fits, image);
    const { state, digest } = checkSums(fits, image.hdu, dataSum);
    warnOfChecksums(fits, image.hdu, state);
    const { nx, ny } = image;
    return { nx, ny, name: basename(fits.source.name), checksum: digest, warnings: fits.warnings, pixels };
  });
}

function readBytes(kernels: Kernels, fits: OpenFits, { hdu }: FoundImage) {
  const memory = kernels.workbench(PIECE_BYTES);
  const room = memory.uint8(PIECE_BYTES);
  const { offset } = fits.data[hdu.index]!;
  const pixels: number[] = [];
  let dataSum = 0;
  for (let at = 0; at < hdu.dataBytes; at += PIECE_BYTES) {
    const piece = room.subarray(0, Math.min(PIECE_BYTES, hdu.dataBytes - at));
    fits.source.readInto(piece, offset + at);
    const isLast = at + piece.length === hdu.dataBytes;
    const ofWords = (bytes: Uint8Array) => checksum(memory, bytes);
    dataSum = addChecksums(dataSum, isLast ? sumOfData(fits, hdu, piece, ofWords) : ofWords(piece));
    findPixels(piece, at, pixels);
  }
  return { pixels, dataSum };
}

/** Bytes that are 0 are passed over by fours. */
function findPixels(piece: Uint8Array, first: number, pixels: number[]): void {
  const fours = new Int32Array(piece.buffer, piece.byteOffset, piece.length >> 2);
  for (let k = 0; k < fours.length; k++) {
    if (fours[k] === 0) continue;
    for (let at = 4 * k; at < 4 * k + 4; at++) if (piece[at] !== 0) pixels.push(first + at);
  }
  for (let at = 4 * fours.length; at < piece.length; at++) if (piece[at] !== 0) pixels.push(first + at);
}

function readValues(kernels: Kernels, fits: OpenFits, image: FoundImage) {
  const { data, dataSum } = decodeImage(kernels, fits, image, false);
  const pixels: number[] = [];
  for (let at = 0; at < data.length; at++) if (data[at] !== 0) pixels.push(at);
  return { pixels, dataSum };
}
