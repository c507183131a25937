/** Images stored as compressed tiles, one a row of a binary table (FITS Standard 4.0, section 10): RICE_1, GZIP_1 and
 * GZIP_2, integers without loss, floats quantised (with subtractive dithering or without) or without loss. */
import { gunzipSync } from "node:zlib";
import type { PixelScaling } from "../reference/pixels.js";
import { type ColumnPlace, ELEMENT_BYTES, placeColumns } from "./columns.js";
import { type Dither, ditherOf } from "./dither.js";
import { FitsError } from "./errors.js";
import { type Card, Header } from "./header.js";
import { unpackRice } from "./rice.js";
import type { ScannedHdu } from "./scan.js";

export function isCompressed(hdu: ScannedHdu): boolean {
  return hdu.type === "BINTABLE" && hdu.header.get("ZIMAGE") === true;
}

const OF_THE_TABLE =
  /^(XTENSION|SIMPLE|BITPIX|NAXIS\d*|PCOUNT|GCOUNT|TFIELDS|THEAP|CHECKSUM|DATASUM|(TTYPE|TFORM|TUNIT|TNULL|TSCAL|TZERO|TDISP|TDIM)\d+|Z(IMAGE|TENSION|SIMPLE|EXTEND|BITPIX|NAXIS\d*|CMPTYPE|QUANTIZ|DITHER0|BLANK|SCALE|ZERO|MASKCMP|PCOUNT|GCOUNT|HECKSUM|DATASUM)|Z(TILE|NAME|VAL)\d+)$/;

/** The header as it was before compression; a ZBLANK of integers becomes their BLANK. */
export function uncompressedHeader(hdu: ScannedHdu): Header {
  const { header } = hdu;
  const card = (keyword: string, from: string): Card => ({ keyword, value: header.get(from) ?? null, comment: "" });
  const nAxes = header.integer("ZNAXIS") ?? 0;
  const cards: Card[] = [
    { keyword: "XTENSION", value: "IMAGE", comment: "" },
    card("BITPIX", "ZBITPIX"),
    card("NAXIS", "ZNAXIS"),
    ...Array.from({ length: Math.min(999, Math.max(0, nAxes)) }, (_, i) => card(`NAXIS${i + 1}`, `ZNAXIS${i + 1}`)),
  ];
  if ((header.number("ZBITPIX") ?? 0) > 0 && header.has("ZBLANK") && !header.has("BLANK"))
    cards.push(card("BLANK", "ZBLANK"));
  return new Header([...cards, ...header.cards.filter((own) => !OF_THE_TABLE.test(own.keyword))], header.place);
}

/** Physical values, ny × nx, into `data`. `stored`: the table's data, heap included.
 * @throws FitsError when the tiles are damaged or of a kind that is not read. */
export function readTiles(
  hdu: ScannedHdu,
  stored: Uint8Array,
  nx: number,
  ny: number,
  scaling: PixelScaling,
  data: Float32Array | Float64Array,
): void {
  const table = new TileTable(hdu, stored, nx, ny);
  const blank = scaling.bitpix > 0 && scaling.blank !== undefined ? Number(scaling.blank) : undefined;
  const plain = scaling.scale === 1 && scaling.zero === 0;
  let tile = 0;
  for (let y0 = 0; y0 < ny; y0 += table.tileNy) {
    for (let x0 = 0; x0 < nx; x0 += table.tileNx) {
      const width = Math.min(table.tileNx, nx - x0);
      const height = Math.min(table.tileNy, ny - y0);
      const values = table.values(tile++, width * height);
      for (let i = 0; i < values.length; i++) {
        const value = values[i];
        const at = (y0 + Math.floor(i / width)) * nx + x0 + (i % width);
        data[at] = value === blank ? Number.NaN : plain ? value : scaling.zero + scaling.scale * value;
      }
    }
  }
}

type Values = Int32Array | Float64Array;

/** The table of tiles: which columns it has, and how a row becomes pixels. */
class TileTable {
  readonly tileNx: number;
  readonly tileNy: number;
  private readonly view: DataView;
  private readonly columns: ColumnPlace[];
  private readonly algorithm: string;
  private readonly bitpix: number;
  private readonly heapAt: number;
  private readonly dither: Dither;

  constructor(
    private readonly hdu: ScannedHdu,
    private readonly stored: Uint8Array,
    nx: number,
    ny: number,
  ) {
    const { header } = hdu;
    this.view = new DataView(stored.buffer, stored.byteOffset, stored.byteLength);
    this.columns = placeColumns(hdu);
    this.algorithm = (header.text("ZCMPTYPE") ?? "").trim();
    this.bitpix = header.integer("ZBITPIX") ?? 0;
    this.tileNx = header.integer("ZTILE1") ?? nx;
    this.tileNy = header.integer("ZTILE2") ?? 1;
    this.heapAt = header.integer("THEAP") ?? hdu.axes[0] * hdu.axes[1];
    if (!["RICE_1", "RICE_ONE", "GZIP_1", "GZIP_2"].includes(this.algorithm)) {
      throw this.unsupported(`tiles compressed by ${this.algorithm || "an unnamed algorithm"}`);
    }
    if (this.column("NULL_PIXEL_MASK") || header.has("ZMASKCMP"))
      throw this.unsupported("tiles with a null-pixel mask");
    const quantiser = (header.text("ZQUANTIZ") ?? "NO_DITHER").trim();
    const dither = ditherOf(quantiser, header.integer("ZDITHER0") ?? 1);
    if (dither === undefined) throw this.unsupported(`tiles quantised by ${quantiser}`);
    this.dither = dither;
    if (!(this.tileNx > 0 && this.tileNy > 0)) throw this.damaged(`tiles of ${this.tileNx} × ${this.tileNy} pixels`);
    const nTiles = Math.ceil(nx / this.tileNx) * Math.ceil(ny / this.tileNy);
    if (nTiles !== hdu.axes[1]) throw this.damaged(`${hdu.axes[1]} tiles where the image has ${nTiles}`);
  }

  /** The pixels of tile `row`, `n` of them: stored integers, or floats. */
  values(row: number, n: number): Values {
    const coded = this.heapBytes("COMPRESSED_DATA", row);
    if (coded !== undefined) {
      const values = this.algorithm.startsWith("RICE")
        ? this.rice(coded, n, row)
        : this.gunzip(coded, n, row, this.algorithm === "GZIP_2");
      const scale = this.perTile("ZSCALE", row);
      if (this.bitpix > 0 || scale === undefined) return values;
      return this.dither(values, row, scale, this.perTile("ZZERO", row) ?? 0, this.perTile("ZBLANK", row));
    }
    const zipped = this.heapBytes("GZIP_COMPRESSED_DATA", row);
    if (zipped !== undefined) return this.gunzip(zipped, n, row, false);
    const plain = this.heapBytes("UNCOMPRESSED_DATA", row);
    if (plain !== undefined) return this.fromBytes(plain, n, row);
    throw this.damaged(`tile ${row + 1} is empty`);
  }

  private rice(coded: Uint8Array, n: number, row: number): Int32Array {
    const pixelBytes = this.parameter("BYTEPIX", 4);
    const blockSize = this.parameter("BLOCKSIZE", 32);
    if ((pixelBytes !== 1 && pixelBytes !== 2 && pixelBytes !== 4) || blockSize < 1) {
      throw this.unsupported(`Rice tiles of BYTEPIX ${pixelBytes} and BLOCKSIZE ${blockSize}`);
    }
    const pixels = unpackRice(coded, n, blockSize, pixelBytes);
    if (pixels === undefined) throw this.damaged(`the codes of tile ${row + 1} end early`);
    return pixels;
  }

  private gunzip(zipped: Uint8Array, n: number, row: number, shuffled: boolean): Values {
    let bytes: Uint8Array;
    try {
      bytes = gunzipSync(zipped, { maxOutputLength: 8 * n });
    } catch {
      throw this.damaged(`tile ${row + 1} does not unpack`);
    }
    if (!shuffled) return this.fromBytes(bytes, n, row);
    // All the first bytes of the pixels, then all the second ones, …
    const width = bytes.length / n;
    const ordered = new Uint8Array(bytes.length);
    for (let i = 0; i < bytes.length; i++) ordered[(i % n) * width + Math.floor(i / n)] = bytes[i];
    return this.fromBytes(ordered, n, row);
  }

  /** Big-endian pixels: floats where the image has them and the tile is not quantised, otherwise integers. */
  private fromBytes(bytes: Uint8Array, n: number, row: number): Values {
    const width = bytes.length / n;
    const view = new DataView(bytes.buffer, bytes.byteOffset, bytes.byteLength);
    const isFloat = this.bitpix < 0 && width * 8 === -this.bitpix && !(width === 4 && this.isQuantised(row));
    if (isFloat)
      return Float64Array.from({ length: n }, (_, i) =>
        width === 4 ? view.getFloat32(4 * i) : view.getFloat64(8 * i),
      );
    if (width === 1) return Int32Array.from(bytes);
    if (width === 2) return Int32Array.from({ length: n }, (_, i) => view.getInt16(2 * i));
    if (width === 4) return Int32Array.from({ length: n }, (_, i) => view.getInt32(4 * i));
    if (width === 8) throw this.unsupported("compressed 64-bit integers");
    throw this.damaged(`tile ${row + 1} has ${bytes.length} bytes for ${n} pixels`);
  }

  private isQuantised(row: number): boolean {
    return this.perTile("ZSCALE", row) !== undefined && this.heapBytes("COMPRESSED_DATA", row) !== undefined;
  }

  /** ZSCALE, ZZERO or ZBLANK: a column of its own, or a card for all tiles. */
  private perTile(name: string, row: number): number | undefined {
    const column = this.column(name);
    if (column === undefined) return this.hdu.header.number(name);
    const at = row * this.hdu.axes[0] + column.at;
    if (column.type === "D") return this.view.getFloat64(at);
    if (column.type === "E") return this.view.getFloat32(at);
    if (column.type === "J") return this.view.getInt32(at);
    throw this.unsupported(`a column ${name} of format ${column.format}`);
  }

  /** The bytes of one variable-length field; undefined when there are none. */
  private heapBytes(name: string, row: number): Uint8Array | undefined {
    const column = this.column(name);
    if (column === undefined) return undefined;
    if (column.type !== "P" && column.type !== "Q")
      throw this.damaged(`the column ${name} has the format ${column.format}`);
    const at = row * this.hdu.axes[0] + column.at;
    const wide = column.type === "Q";
    const count = wide ? Number(this.view.getBigInt64(at)) : this.view.getInt32(at);
    const from = this.heapAt + (wide ? Number(this.view.getBigInt64(at + 8)) : this.view.getInt32(at + 4));
    if (count === 0) return undefined;
    const nBytes = count * (ELEMENT_BYTES[column.heapType] ?? 1);
    if (count < 0 || from < this.heapAt || from + nBytes > this.stored.length) {
      throw this.damaged(`tile ${row + 1} lies outside of the table's heap`);
    }
    return this.stored.subarray(from, from + nBytes);
  }

  private column(name: string): ColumnPlace | undefined {
    return this.columns.find((column) => column.name === name && column.repeat > 0);
  }

  /** One of the algorithm's parameters, given as ZNAMEn and ZVALn. */
  private parameter(name: string, otherwise: number): number {
    const { header } = this.hdu;
    for (let i = 1; header.has(`ZNAME${i}`); i++) {
      if (header.text(`ZNAME${i}`)?.trim() === name) return header.integer(`ZVAL${i}`) ?? otherwise;
    }
    return otherwise;
  }

  private damaged(finding: string): FitsError {
    return new FitsError("data", finding, "fetch the file again", this.hdu.header.place);
  }

  private unsupported(what: string): FitsError {
    return new FitsError("unsupported", `${what} are not read`, "unpack the file first", this.hdu.header.place);
  }
}
