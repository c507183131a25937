/** Images in: any HDU, any kind of pixel, plain or in compressed tiles, as physical values. */
import { basename } from "node:path";
import { checksum } from "../kernels/checksum.js";
import { frameBytes, reserveFrameRoom } from "../kernels/frameRoom.js";
import { type Kernels, loadKernels, type Workbench } from "../kernels/module.js";
import { decodePixels, decodingBytes, fitsFloat32 } from "../kernels/pixels.js";
import type { PixelScaling } from "../reference/pixels.js";
import { FitsError } from "./errors.js";
import type { Header } from "./header.js";
import { type ChecksumState, checkSums, findHdu, type OpenFits, readData, sumOfData, withFits } from "./open.js";
import type { ScannedHdu } from "./scan.js";
import { isCompressed, readTiles, uncompressedHeader } from "./tiles.js";

export interface FitsImage {
  /** NAXIS1 and NAXIS2. */
  nx: number;
  ny: number;
  /** ny × nx, row-major, physical values (BSCALE and BZERO applied), NaN where there is none. Float32 when that is
   * exact (8 and 16 bits unscaled or unsigned, −32 unscaled), otherwise Float64. */
  data: Float32Array | Float64Array;
  bitpix: number;
  /** The image HDU's header; of a compressed image, as it was before compression. */
  header: Header;
  primaryHeader: Header;
  /** From 0. */
  hduIndex: number;
  /** The file's name without its folder, for products and messages. */
  name: string;
  /** BUNIT; empty when the header does not say. */
  unit: string;
  checksumState: ChecksumState;
  /** 16 hexadecimal digits that stand for the HDU's header and data; another file, another digest. */
  checksum: string;
  /** What is odd but does no harm; one sentence each. */
  warnings: string[];
  /** Those that decoded the pixels, and the memory in which `data` lie. */
  kernels: Kernels;
  memory: Workbench;
  /** Room for the frame made of it, in front of `data`; absent when not asked for. */
  room?: Uint8Array;
}

export interface ReadOptions {
  /** From 0, or an EXTNAME; default: the first image of two axes. */
  hdu?: number | string | undefined;
  /** What to call bytes in messages. */
  name?: string | undefined;
  /** Read a raw frame into the room behind the frame that will be made of it: `correctFrame` takes that memory for the frame,
   * and whatever works on the frame may write over the raw pixels. Default false. */
  forFrame?: boolean | undefined;
}

/** One image. `input`: a path, "-" for standard input, or bytes; gzip or not.
 * @throws FitsError, one sentence with file and place, when the file is damaged or holds no such image. */
export function readImage(input: string | Uint8Array, options: ReadOptions = {}): Promise<FitsImage> {
  return withFits(input, options.name, async (fits) => {
    const found = imageIn(fits, options);
    const { hdu, header } = found;
    const kernels = await loadKernels();
    const { data, dataSum, memory, room } = decodeImage(kernels, fits, found, options.forFrame === true);
    const { state, digest } = checkSums(fits, hdu, dataSum);
    warnOfChecksums(fits, hdu, state);
    return {
      nx: found.nx,
      ny: found.ny,
      data,
      bitpix: found.scaling.bitpix,
      header,
      primaryHeader: fits.hdus[0].header,
      hduIndex: hdu.index,
      name: basename(fits.source.name),
      unit: (header.text("BUNIT") ?? "").trim(),
      checksumState: state,
      checksum: digest,
      warnings: fits.warnings,
      kernels,
      memory,
      ...(room ? { room } : {}),
    };
  });
}

/** An image HDU, and what its pixels are. */
export interface FoundImage {
  hdu: ScannedHdu;
  /** Of a compressed image, as it was before compression. */
  header: Header;
  compressed: boolean;
  nx: number;
  ny: number;
  scaling: PixelScaling;
}

/** The image that is asked for. */
export function imageIn(fits: OpenFits, options: ReadOptions): FoundImage {
  const hdu = options.hdu === undefined ? firstImage(fits) : findHdu(fits, options.hdu);
  const compressed = isCompressed(hdu);
  const header = compressed ? uncompressedHeader(hdu) : hdu.header;
  const { nx, ny, bitpix } = shapeOf(hdu, header, compressed);
  return { hdu, header, compressed, nx, ny, scaling: scalingOf(header, bitpix, fits) };
}

function isImageKind(hdu: ScannedHdu): boolean {
  return ((hdu.type === "PRIMARY" || hdu.type === "IMAGE") && !hdu.groups) || isCompressed(hdu);
}

function axesOf(hdu: ScannedHdu): number[] {
  if (!isCompressed(hdu)) return hdu.axes;
  const n = hdu.header.integer("ZNAXIS") ?? 0;
  return n > 999 ? [] : Array.from({ length: Math.max(0, n) }, (_, i) => hdu.header.integer(`ZNAXIS${i + 1}`) ?? 0);
}

/** Two axes, others being of length 1. */
function isPlane(axes: readonly number[]): boolean {
  return axes.length >= 2 && axes[0] > 0 && axes[1] > 0 && axes.slice(2).every((size) => size === 1);
}

function firstImage(fits: OpenFits): ScannedHdu {
  const images = fits.hdus.filter((hdu) => isImageKind(hdu) && axesOf(hdu).some((size) => size > 0));
  const planes = images.filter((hdu) => isPlane(axesOf(hdu)));
  if (planes.length > 1) {
    const which = planes.map((hdu) => hdu.index).join(", ");
    fits.warnings.push(`${fits.source.name}: HDUs ${which} all hold images; HDU ${planes[0].index} is used.`);
  }
  const first = planes[0] ?? images[0];
  if (first !== undefined) return first;
  throw new FitsError("not-found", "no HDU holds an image of two axes", "give a file with an image", {
    file: fits.source.name,
  });
}

function shapeOf(hdu: ScannedHdu, header: Header, compressed: boolean): { nx: number; ny: number; bitpix: number } {
  const refuse = (finding: string, remedy: string) => new FitsError("unsupported", finding, remedy, header.place);
  if (!isImageKind(hdu)) {
    const kind = hdu.groups ? "random groups" : hdu.type === "BINTABLE" || hdu.type === "TABLE" ? "a table" : hdu.type;
    throw refuse(`this is ${kind}, not an image`, "choose another HDU");
  }
  const axes = axesOf(hdu);
  if (!isPlane(axes)) {
    const shape = axes.length === 0 ? "no data" : `${axes.join(" × ")} pixels`;
    throw refuse(`the HDU holds ${shape}`, "give an image of two axes");
  }
  const bitpix = compressed ? header.integer("BITPIX") : hdu.bitpix;
  if (bitpix === undefined || ![8, 16, 32, 64, -32, -64].includes(bitpix)) {
    throw new FitsError(
      "structure",
      `ZBITPIX is ${bitpix ?? "missing"}`,
      "it must be 8, 16, 32, 64, -32 or -64",
      header.place,
    );
  }
  return { nx: axes[0], ny: axes[1], bitpix };
}

function scalingOf(header: Header, bitpix: number, fits: OpenFits): PixelScaling {
  const scale = header.number("BSCALE") ?? 1;
  const zero = header.number("BZERO") ?? 0;
  if (scale === 0) {
    throw new FitsError("card", "BSCALE is 0, which makes every pixel equal", "correct that card", {
      ...header.place,
      card: "BSCALE",
    });
  }
  const blank = header.get("BLANK");
  if (blank === undefined || blank === null) return { bitpix, scale, zero };
  if (bitpix < 0) {
    fits.warnings.push(
      `${fits.source.name}: HDU ${header.place.hdu}: BLANK means nothing for floating point and is left aside.`,
    );
    return { bitpix, scale, zero };
  }
  return { bitpix, scale, zero, blank: typeof blank === "bigint" ? blank : header.integer("BLANK") };
}

interface Decoded {
  data: Float32Array | Float64Array;
  dataSum: number;
  memory: Workbench;
  room?: Uint8Array;
}

/** Its pixels' values, and the sum over its data. */
export function decodeImage(kernels: Kernels, fits: OpenFits, image: FoundImage, forFrame: boolean): Decoded {
  const { hdu, compressed, nx, ny, scaling } = image;
  return withinMemory(fits, hdu, () => {
    const held = memoryFor(kernels, nx * ny, scaling, forFrame);
    const decode = compressed ? decodeTiles : decodePlain;
    return { ...held, ...decode(held.memory, fits, image) };
  });
}

/** Memory for `n` pixels and their decoding. */
function memoryFor(kernels: Kernels, n: number, scaling: PixelScaling, forFrame: boolean) {
  const nBytes = decodingBytes(n, scaling);
  if (!forFrame) return { memory: kernels.workbench(nBytes, 1) };
  const memory = reserveFrameRoom(kernels, n, frameBytes(n) + nBytes);
  const room = memory.uint8(frameBytes(n));
  // What is not read into but decoded into, then the frame's own.
  memory.touchAhead(room.byteOffset + room.length, nBytes - (n * Math.abs(scaling.bitpix)) / 8);
  memory.touchAhead(room.byteOffset, room.length);
  return { memory, room };
}

function decodePlain(memory: Workbench, fits: OpenFits, { hdu, nx, ny, scaling }: FoundImage) {
  let dataSum = 0;
  const data = decodePixels(memory, nx * ny, scaling, (stored) => {
    fits.source.readInto(stored, fits.data[hdu.index]!.offset);
    dataSum = sumOfData(fits, hdu, stored, (whole) => checksum(memory, whole));
  });
  return { data, dataSum };
}

function decodeTiles(memory: Workbench, fits: OpenFits, { hdu, nx, ny, scaling }: FoundImage) {
  const stored = readData(fits, hdu);
  const data = fitsFloat32(scaling) ? memory.float32(nx * ny) : memory.float64(nx * ny);
  readTiles(hdu, stored, nx, ny, scaling, data);
  return { data, dataSum: sumOfData(fits, hdu, stored) };
}

function withinMemory<T>(fits: OpenFits, hdu: ScannedHdu, work: () => T): T {
  try {
    return work();
  } catch (error) {
    if (!(error instanceof RangeError)) throw error;
    const place = { file: fits.source.name, hdu: hdu.index };
    throw new FitsError(
      "unsupported",
      `the image does not fit into memory (${hdu.dataBytes} bytes)`,
      "cut it down",
      place,
    );
  }
}

export function warnOfChecksums(fits: OpenFits, hdu: ScannedHdu, state: ChecksumState): void {
  const primary = fits.hdus[0];
  const primaryWrong = hdu.index > 0 && primary.dataBytes === 0 && checkSums(fits, primary, 0).state === "wrong";
  for (const [index, wrong] of [
    [0, primaryWrong],
    [hdu.index, state === "wrong"],
  ] as const) {
    if (wrong)
      fits.warnings.push(
        `${fits.source.name}: HDU ${index}: the checksum is wrong; the file has been changed or damaged.`,
      );
  }
}
