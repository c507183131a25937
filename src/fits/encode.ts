/** HDUs to bytes: headers with checksums, images and binary tables, big-endian (FITS Standard 4.0, sections 3, 4, 7). */
import { BLOCK_BYTES, formatHeader } from "./cards.js";
import { isStructural } from "./carry.js";
import { addChecksums, checksum, encodeChecksum } from "./checksum.js";
import { Encoder, type PixelArray } from "./encoder.js";
import { FitsError } from "./errors.js";
import type { Card, CardValue } from "./header.js";

export type { PixelArray } from "./encoder.js";

export interface OutputImage {
  nx: number;
  ny: number;
  /** Row-major, nx · ny; NaN where there is no value. */
  data: PixelArray;
  unit?: string | undefined;
}

export interface OutputColumn {
  name: string;
  /** TFORM: repeat count and one of L B I J K E D A ("1J", "5D", "8A"). */
  format: string;
  /** nRows · repeat numbers, or nRows texts. */
  data: ArrayLike<number> | ArrayLike<bigint> | readonly string[] | readonly boolean[];
  unit?: string | undefined;
  /** TNULL of a column of whole numbers. */
  nullValue?: number | undefined;
}

export type OutputHdu =
  | { kind: "primary"; header: Card[]; image?: OutputImage; name?: string }
  | ({ kind: "image"; name: string; cards?: Card[] } & OutputImage)
  | { kind: "table"; name: string; columns: OutputColumn[]; cards?: Card[] };

/** The whole file in memory.
 * @throws FitsError when a card, a shape or a format cannot be written. */
export function encodeFits(hdus: readonly OutputHdu[]): Uint8Array {
  const pieces: Uint8Array[] = [];
  for (const piece of encodeHdus(hdus, new Encoder())) pieces.push(piece.slice());
  return Buffer.concat(pieces);
}

/** The file piece by piece, in order; each is gone when the next is asked for. Data are encoded twice, since their sum stands
 * in the header before them.
 * @throws FitsError as `encodeFits`. */
export function* encodeHdus(hdus: readonly OutputHdu[], encoder: Encoder): Generator<Uint8Array> {
  for (const hdu of planHdus(hdus)) {
    let sum = 0;
    for (const piece of hdu.data(encoder)) sum = addChecksums(sum, encoder.sum(piece));
    yield hdu.header(sum);
    yield* hdu.data(encoder);
  }
}

/** One HDU on its way out. */
export interface PlannedHdu {
  headerBytes: number;
  /** With the sum over the data. */
  header: (dataSum: number) => Uint8Array;
  /** Whole words each, padding included; a piece is gone when the next is asked for. */
  data: (encoder: Encoder) => Iterable<Uint8Array>;
}

/** @throws FitsError as `encodeFits`. */
export function* planHdus(hdus: readonly OutputHdu[]): Generator<PlannedHdu> {
  if (hdus[0]?.kind !== "primary" || hdus.slice(1).some((hdu) => hdu.kind === "primary")) {
    throw new FitsError("output", "the list of HDUs has no primary at its head, or a second one", "put one, first");
  }
  for (const hdu of hdus) {
    const data = dataOf(hdu);
    const header = (dataSum: number) => encodeHeader(hdu, dataSum, hdus.length > 1);
    // Sums of any size take one card.
    yield { headerBytes: header(0).length, header, data };
  }
}

function dataOf(hdu: OutputHdu): PlannedHdu["data"] {
  if (hdu.kind === "table") {
    const bytes = encodeTable(hdu);
    return () => [bytes];
  }
  const image = hdu.kind === "image" ? hdu : hdu.image;
  if (image === undefined) return () => [];
  requireShape(image, hdu.name ?? "PRIMARY");
  return (encoder) => encoder.pixels(image.data);
}

function requireShape({ nx, ny, data }: OutputImage, name: string): void {
  if (nx >= 1 && ny >= 1 && data.length === nx * ny) return;
  throw new FitsError("output", `${name} has ${data.length} pixels for ${nx} × ${ny}`, "give nx · ny pixels");
}

function encodeHeader(hdu: OutputHdu, dataSum: number, hasExtensions: boolean): Uint8Array {
  const own = (hdu.kind === "primary" ? hdu.header : hdu.cards) ?? [];
  const taken = own.find((card) => isStructural(card.keyword));
  if (taken !== undefined) {
    throw new FitsError(
      "output",
      `the card ${taken.keyword} is set by the writer`,
      "pass an input's header through inputCards()",
      {
        card: taken.keyword,
      },
    );
  }
  const [structure, description] = hdu.kind === "table" ? tableCards(hdu) : imageCards(hdu, hasExtensions);
  const cards = (sum: string): Card[] => [
    ...structure,
    textCard("EXTNAME", hdu.name ?? "PRIMARY"),
    ...description,
    textCard("CHECKSUM", sum, "makes the sum of the whole HDU -0"),
    textCard("DATASUM", String(dataSum), "sum of the data"),
    ...own,
  ];
  const sum = addChecksums(checksum(formatHeader(cards("0".repeat(16)))), dataSum);
  return formatHeader(cards(encodeChecksum(sum)));
}

function textCard(keyword: string, value: string, comment = ""): Card {
  return { keyword, value, comment };
}

function valueCard(keyword: string, value: CardValue, comment = ""): Card {
  return { keyword, value, comment };
}

function imageCards(hdu: Exclude<OutputHdu, { kind: "table" }>, hasExtensions: boolean): [Card[], Card[]] {
  const image = hdu.kind === "image" ? hdu : hdu.image;
  const { bitpix, zero } = image === undefined ? { bitpix: 8, zero: 0 } : storedAs(image.data);
  const axes = image === undefined ? [] : [image.nx, image.ny];
  const first =
    hdu.kind === "primary"
      ? valueCard("SIMPLE", true, "FITS Standard 4.0")
      : textCard("XTENSION", "IMAGE", "image extension");
  const last =
    hdu.kind === "image"
      ? [valueCard("PCOUNT", 0), valueCard("GCOUNT", 1)]
      : hasExtensions
        ? [valueCard("EXTEND", true, "extensions follow")]
        : [];
  const structure = [
    first,
    valueCard("BITPIX", bitpix, "bits a pixel; negative: floating point"),
    valueCard("NAXIS", axes.length),
    ...axes.map((size, i) => valueCard(`NAXIS${i + 1}`, size)),
    ...last,
  ];
  const scaling = zero === 0 ? [] : [valueCard("BSCALE", 1), valueCard("BZERO", zero, "offset of unsigned numbers")];
  const unit = image === undefined ? [] : [textCard("BUNIT", image.unit ?? "")];
  return [structure, [...scaling, ...unit]];
}

function storedAs(data: PixelArray): { bitpix: number; zero: number } {
  if (data instanceof Uint8Array) return { bitpix: 8, zero: 0 };
  if (data instanceof Int16Array) return { bitpix: 16, zero: 0 };
  if (data instanceof Uint16Array) return { bitpix: 16, zero: 32768 };
  if (data instanceof Int32Array) return { bitpix: 32, zero: 0 };
  if (data instanceof Uint32Array) return { bitpix: 32, zero: 2147483648 };
  return { bitpix: data instanceof Float32Array ? -32 : -64, zero: 0 };
}

const WIDTH: Record<string, number> = { L: 1, A: 1, B: 1, I: 2, J: 4, K: 8, E: 4, D: 8 };

interface Layout {
  repeat: number;
  type: string;
  /** Bytes from the start of a row. */
  at: number;
}

function layOut(columns: readonly OutputColumn[]): { layouts: Layout[]; rowBytes: number; nRows: number } {
  let at = 0;
  let nRows = -1;
  const layouts = columns.map((column) => {
    const match = /^(\d*)([LABIJKED])$/.exec(column.format);
    const repeat = match === null || match[1] === "" ? 1 : Number(match[1]);
    if (match === null || repeat === 0) {
      throw new FitsError(
        "output",
        `column ${column.name} has the format ${column.format}`,
        "use a count and one of LABIJKED",
      );
    }
    const type = match[2];
    const rows = column.data.length / (type === "A" ? 1 : repeat);
    if (nRows === -1) nRows = rows;
    if (!Number.isInteger(rows) || rows !== nRows) {
      throw new FitsError(
        "output",
        `column ${column.name} has ${rows} rows and the first has ${nRows}`,
        "make them equal",
      );
    }
    const layout = { repeat, type, at };
    at += repeat * WIDTH[type];
    return layout;
  });
  return { layouts, rowBytes: at, nRows: Math.max(0, nRows) };
}

function tableCards(hdu: Extract<OutputHdu, { kind: "table" }>): [Card[], Card[]] {
  const { rowBytes, nRows } = layOut(hdu.columns);
  const structure = [
    textCard("XTENSION", "BINTABLE", "binary table extension"),
    valueCard("BITPIX", 8),
    valueCard("NAXIS", 2),
    valueCard("NAXIS1", rowBytes, "bytes a row"),
    valueCard("NAXIS2", nRows, "rows"),
    valueCard("PCOUNT", 0),
    valueCard("GCOUNT", 1),
    valueCard("TFIELDS", hdu.columns.length, "columns"),
  ];
  const columns = hdu.columns.flatMap((column, i) => [
    textCard(`TTYPE${i + 1}`, column.name),
    textCard(`TFORM${i + 1}`, column.format),
    ...(column.unit === undefined ? [] : [textCard(`TUNIT${i + 1}`, column.unit)]),
    ...(column.nullValue === undefined ? [] : [valueCard(`TNULL${i + 1}`, column.nullValue, "no value")]),
  ]);
  return [structure, columns];
}

function encodeTable(hdu: Extract<OutputHdu, { kind: "table" }>): Uint8Array {
  const { layouts, rowBytes, nRows } = layOut(hdu.columns);
  const bytes = new Uint8Array(Math.ceil((rowBytes * nRows) / BLOCK_BYTES) * BLOCK_BYTES);
  const view = new DataView(bytes.buffer);
  hdu.columns.forEach((column, c) => {
    const { repeat, type, at } = layouts[c];
    for (let row = 0; row < nRows; row++) {
      const start = row * rowBytes + at;
      if (type === "A") putText(bytes, start, repeat, column, row);
      else {
        for (let k = 0; k < repeat; k++) {
          putNumber(view, start + k * WIDTH[type], type, column.data[row * repeat + k], column.name);
        }
      }
    }
  });
  return bytes;
}

function putText(bytes: Uint8Array, at: number, width: number, column: OutputColumn, row: number): void {
  const text = column.data[row];
  if (typeof text !== "string" || text.length > width || /[^ -~]/.test(text)) {
    throw new FitsError(
      "output",
      `column ${column.name}, row ${row + 1}: "${text}" is not ASCII text of up to ${width} characters`,
      "shorten it",
    );
  }
  // What follows a shorter text stays NUL, which ends it.
  for (let i = 0; i < text.length; i++) bytes[at + i] = text.charCodeAt(i);
}

const WHOLE_RANGE: Record<string, [number, number]> = {
  B: [0, 255],
  I: [-32768, 32767],
  J: [-2147483648, 2147483647],
};

function putNumber(view: DataView, at: number, type: string, value: unknown, name: string): void {
  const number = Number(value);
  if (type === "L") view.setUint8(at, value ? 84 : 70);
  else if (type === "K") view.setBigInt64(at, BigInt(value as number | bigint));
  else if (type === "E") view.setFloat32(at, number);
  else if (type === "D") view.setFloat64(at, number);
  else putWhole(view, at, type, number, name);
}

function putWhole(view: DataView, at: number, type: string, number: number, name: string): void {
  const [low, high] = WHOLE_RANGE[type];
  if (!(Number.isInteger(number) && number >= low && number <= high)) {
    const finding = `column ${name} holds ${number}, which format ${type} cannot`;
    throw new FitsError("output", finding, "use another format or a null value");
  }
  if (type === "B") view.setUint8(at, number);
  else if (type === "I") view.setInt16(at, number);
  else view.setInt32(at, number);
}
