/** An image's headers without its pixels: of plain files the headers alone are read, of files packed with gzip only as much
 * is unpacked as they take. */
import fs from "node:fs";
import { constants, gunzipSync } from "node:zlib";
import { FitsError } from "./errors.js";
import type { Header } from "./header.js";
import { imageIn } from "./image.js";
import { firstHdus, type ScannedHdu } from "./scan.js";
import { openSource, type Source } from "./source.js";
import { isCompressed } from "./tiles.js";

export interface ImageHeader {
  /** NAXIS1 and NAXIS2. */
  nx: number;
  ny: number;
  bitpix: number;
  /** Of a compressed image, as it was before compression. */
  header: Header;
  primaryHeader: Header;
}

/** Bytes of a packed file that are looked at first: headers of some thousand cards. */
const FIRST_BYTES = 1 << 16;

/** Of the first image in the file, or of the one in HDU `hdu`, from 0.
 * @throws FitsError when the headers are damaged, or there is no such image. */
export async function imageHeader(path: string, hdu?: number): Promise<ImageHeader> {
  const start = packedStart(path);
  if (start !== undefined) {
    try {
      return headerIn(start, hdu);
    } catch (error) {
      // Headers beyond the start, behind the data of another HDU for one.
      if (!(error instanceof FitsError)) throw error;
    }
  }
  const source = await openSource(path);
  try {
    return headerIn(source, hdu);
  } finally {
    source.close();
  }
}

function headerIn(source: Source, hdu: number | undefined): ImageHeader {
  const warnings: string[] = [];
  const isEnough = (one: ScannedHdu) => (hdu === undefined ? isPlane(one) : one.index === hdu);
  const hdus = firstHdus(source, warnings, isEnough);
  const image = imageIn({ source, hdus, data: [], warnings }, { hdu });
  const { nx, ny, header, scaling } = image;
  return { nx, ny, header, bitpix: scaling.bitpix, primaryHeader: hdus[0].header };
}

function isPlane(hdu: ScannedHdu): boolean {
  if (isCompressed(hdu)) return true;
  return /^(PRIMARY|IMAGE)$/.test(hdu.type) && hdu.axes.length > 1 && hdu.axes.every((size) => size > 0);
}

/** What lies at the start of a file packed with gzip, as if all the rest were there; undefined for other files. */
function packedStart(path: string): Source | undefined {
  let packed: Buffer;
  try {
    if (!fs.statSync(path).isFile()) return undefined;
    const file = fs.openSync(path, "r");
    try {
      packed = Buffer.alloc(FIRST_BYTES);
      packed = packed.subarray(0, fs.readSync(file, packed, 0, FIRST_BYTES, 0));
    } finally {
      fs.closeSync(file);
    }
    if (packed[0] !== 0x1f || packed[1] !== 0x8b) return undefined;
    const bytes = gunzipSync(packed, { finishFlush: constants.Z_SYNC_FLUSH });
    return {
      name: path,
      size: Number.MAX_SAFE_INTEGER,
      readInto(target, offset) {
        if (offset + target.length > bytes.length) {
          throw new FitsError("truncated", "its headers go on further in", "unpack it", { file: path });
        }
        target.set(bytes.subarray(offset, offset + target.length));
      },
      close() {},
    };
  } catch {
    return undefined; // Told by the reader of the whole file.
  }
}
