/** fitsjs behind a gate. It reads sound files well and hangs on damaged ones, so it is shown a virtual file:
 *
 *     scan.ts         the file itself              what fitsjs sees
 *     HDU n  ───────  header (any cards)    ───→   a new header, structural cards only
 *                     data                  ───→   the same bytes, fetched when asked for
 *                     trailing bytes               nothing
 *
 * What it says of the HDUs is compared with the scan; the data ranges, the geometry and the accessors of the native
 * columns are taken from it. It is compiled with its browser names as parameters: no global is touched. */
import fs from "node:fs";
import { createRequire } from "node:module";
import { compileFunction } from "node:vm";
import { BLOCK_BYTES, formatHeader } from "./cards.js";
import { FitsError } from "./errors.js";
import type { Card } from "./header.js";
import type { ScannedHdu } from "./scan.js";
import type { Source } from "./source.js";

/** What fitsjs says of one HDU's data. */
export interface GatedData {
  offset: number;
  nBytes: number;
  /** Of binary tables it could take: reads one field at a byte offset of the view, returns [value, next offset]. */
  accessors?: ((view: DataView, offset: number) => [unknown, number])[];
}

interface FitsjsData {
  blob: VirtualBlob;
  width?: number;
  height?: number;
  bitpix?: number;
  rows?: number;
  rowByteSize?: number;
  accessors?: GatedData["accessors"];
}

/** More columns than this and fitsjs no longer sees all of their cards. */
export const MAX_COLUMNS = 290;
const NATIVE_FORMAT = /^\d*(?:[LXBIJKAEDCM]|[PQ][LXBIJKAEDCM](?:\(\d+\))?)$/;

/** The data of every HDU, null for those without.
 * @throws FitsError when fitsjs sees another file than the scan did. */
export async function passGate(source: Source, hdus: readonly ScannedHdu[]): Promise<(GatedData | null)[]> {
  const seen = await directory(virtualFile(source, hdus), source.name);
  const disagree = (hdu: number, what: string) =>
    new FitsError("structure", `two readings of the file disagree on ${what}`, "check the file with a FITS verifier", {
      file: source.name,
      hdu,
    });
  if (seen.length !== hdus.length) throw disagree(0, `the number of HDUs, ${seen.length} and ${hdus.length}`);
  return hdus.map((hdu, i) => {
    const data = seen[i].data;
    if (hdu.dataBytes === 0) {
      if (data) throw disagree(i, "whether there are data");
      return null;
    }
    if (!data || data.blob.sourceOffset !== hdu.dataOffset || data.blob.size !== hdu.dataBytes) {
      throw disagree(i, "where the data are");
    }
    const shape = shownShape(hdu);
    const columns = shape.isTable ? data.rowByteSize : data.width;
    const rows = shape.isTable ? data.rows : data.height;
    if (columns !== shape.axes[0] || rows !== shape.axes[1]) throw disagree(i, "the shape of the data");
    const gated: GatedData = { offset: data.blob.sourceOffset, nBytes: data.blob.size };
    if (shape.isTable && data.accessors) gated.accessors = data.accessors;
    return gated;
  });
}

/** How an HDU is shown: extra axes folded into the second; what fitsjs cannot take, as plain bytes. */
function shownShape(hdu: ScannedHdu): { isTable: boolean; bitpix: number; axes: [number, number] } {
  if (hdu.type === "BINTABLE" && hdu.axes[0] > 0 && hdu.axes[1] > 0 && columnFormats(hdu) !== undefined) {
    return { isTable: true, bitpix: 8, axes: [hdu.axes[0], hdu.axes[1]] };
  }
  const isImage = (hdu.type === "PRIMARY" || hdu.type === "IMAGE") && !hdu.groups;
  if (!isImage) return { isTable: false, bitpix: 8, axes: [hdu.dataBytes, 1] };
  // It knows no 64-bit integers; nothing but their size matters here.
  const bitpix = hdu.bitpix === 64 ? -64 : hdu.bitpix;
  return { isTable: false, bitpix, axes: [hdu.axes[0], hdu.axes.slice(1).reduce((a, b) => a * b, 1)] };
}

/** TFORMn of a table that fitsjs can take. */
function columnFormats(hdu: ScannedHdu): string[] | undefined {
  const n = hdu.header.get("TFIELDS");
  if (typeof n !== "number" || n < 1 || n > MAX_COLUMNS) return undefined;
  const formats = Array.from({ length: n }, (_, i) => hdu.header.get(`TFORM${i + 1}`));
  return formats.every((form) => typeof form === "string" && NATIVE_FORMAT.test(form))
    ? (formats as string[])
    : undefined;
}

function shownHeader(hdu: ScannedHdu): Uint8Array {
  const card = (keyword: string, value: Card["value"] & (string | number | boolean)): Card => ({
    keyword,
    value,
    comment: "",
  });
  const { isTable, bitpix, axes } = shownShape(hdu);
  const shown = hdu.dataBytes === 0 ? [] : axes;
  const cards = [
    hdu.index === 0 ? card("SIMPLE", true) : card("XTENSION", isTable ? "BINTABLE" : "IMAGE"),
    card("BITPIX", bitpix),
    card("NAXIS", shown.length),
    ...shown.map((size, i) => card(`NAXIS${i + 1}`, size)),
  ];
  if (hdu.index > 0) cards.push(card("PCOUNT", isTable ? hdu.pcount : 0), card("GCOUNT", 1));
  if (isTable) {
    const formats = columnFormats(hdu) ?? [];
    cards.push(card("TFIELDS", formats.length));
    cards.push(...formats.flatMap((form, i) => [card(`TTYPE${i + 1}`, `C${i + 1}`), card(`TFORM${i + 1}`, form)]));
  }
  return formatHeader(cards);
}

interface Segment {
  start: number;
  length: number;
  bytes?: Uint8Array;
  sourceOffset: number;
}

function virtualFile(source: Source, hdus: readonly ScannedHdu[]): VirtualBlob {
  const segments: Segment[] = [];
  let size = 0;
  const append = (length: number, sourceOffset: number, bytes?: Uint8Array) => {
    segments.push(bytes ? { start: size, length, bytes, sourceOffset } : { start: size, length, sourceOffset });
    size += length;
  };
  for (const hdu of hdus) {
    const header = shownHeader(hdu);
    append(header.length, -1, header);
    append(hdu.dataBytes, hdu.dataOffset);
    const padding = (BLOCK_BYTES - (hdu.dataBytes % BLOCK_BYTES)) % BLOCK_BYTES;
    append(padding, -1, new Uint8Array(padding));
  }
  return new VirtualBlob(source, segments, 0, size);
}

/** A stretch of the virtual file: all that fitsjs asks of a File is its size and its slices. */
class VirtualBlob {
  constructor(
    private readonly source: Source,
    private readonly segments: Segment[],
    private readonly start: number,
    private readonly end: number,
  ) {}

  get size(): number {
    return this.end - this.start;
  }

  /** Where this stretch starts in the real file; −1 when that is not within data. */
  get sourceOffset(): number {
    const segment = this.segments.find((s) => s.length > 0 && s.start <= this.start && this.start < s.start + s.length);
    return segment === undefined || segment.sourceOffset < 0 ? -1 : segment.sourceOffset + this.start - segment.start;
  }

  slice(from: number, to = this.size): VirtualBlob {
    const start = Math.min(this.start + Math.max(0, from), this.end);
    return new VirtualBlob(this.source, this.segments, start, Math.max(start, Math.min(this.start + to, this.end)));
  }

  read(): ArrayBuffer {
    const bytes = new Uint8Array(this.size);
    for (const segment of this.segments) {
      const from = Math.max(segment.start, this.start);
      const to = Math.min(segment.start + segment.length, this.end);
      if (from >= to) continue;
      const target = bytes.subarray(from - this.start, to - this.start);
      if (segment.bytes) target.set(segment.bytes.subarray(from - segment.start, to - segment.start));
      else this.source.readInto(target, segment.sourceOffset + from - segment.start);
    }
    return bytes.buffer;
  }
}

type Directory = { data?: FitsjsData | undefined }[];

function directory(file: VirtualBlob, name: string): Promise<Directory> {
  return new Promise((resolve, reject) => {
    const fail = (error: unknown) => {
      const finding = `the reader gave up (${error instanceof Error ? error.message : String(error)})`;
      reject(
        error instanceof FitsError ? error : new FitsError("structure", finding, "check the file", { file: name }),
      );
    };
    class Reader {
      onloadend?: (event: { target: { result: ArrayBuffer } }) => void;

      readAsArrayBuffer(blob: VirtualBlob): void {
        queueMicrotask(() => {
          try {
            // Past the end it would go on for ever.
            if (blob.size === 0) throw new Error("it ran past the end");
            this.onloadend?.({ target: Object.assign(this, { result: blob.read() }) });
          } catch (error) {
            fail(error);
          }
        });
      }
    }
    try {
      const FITS = loadFitsjs(Reader);
      new FITS(file, (fits) => resolve(fits.hdus));
    } catch (error) {
      fail(error);
    }
  });
}

type Fitsjs = new (file: VirtualBlob, done: (fits: { hdus: Directory }) => void) => unknown;
let compiled: ReturnType<typeof compileFunction> | undefined;

/** A fresh instance of the library; its names are looked up among these parameters, not among the globals. */
function loadFitsjs(FileReader: unknown): Fitsjs {
  compiled ??= compileFunction(fs.readFileSync(createRequire(import.meta.url).resolve("fitsjs"), "utf8"), [
    "astro",
    "File",
    "Blob",
    "FileReader",
    "XMLHttpRequest",
    "Worker",
    "window",
    "console",
  ]);
  const astro: { FITS?: Fitsjs } = {};
  const silent = { warn() {}, log() {} };
  compiled.call({ astro }, astro, VirtualBlob, VirtualBlob, FileReader, undefined, undefined, undefined, silent);
  return astro.FITS!;
}
