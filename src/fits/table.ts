/** Binary tables in: columns as typed arrays, or as texts. */
import { type ColumnPlace, ELEMENT_BYTES, placeColumns } from "./columns.js";
import { FitsError } from "./errors.js";
import { MAX_COLUMNS } from "./gate.js";
import type { Header } from "./header.js";
import { checkSums, findHdu, type OpenFits, readData, sumOfData, withFits } from "./open.js";
import type { ScannedHdu } from "./scan.js";

export type ColumnData =
  | Uint8Array
  | Int16Array
  | Int32Array
  | Float32Array
  | Float64Array
  | string[]
  | (boolean | null)[];

export interface FitsColumn {
  name: string;
  /** TUNIT; empty when the header does not say. */
  unit: string;
  /** Elements a row; 1 for texts. */
  repeat: number;
  /** nRows × repeat. B, I, J, E, D keep their type; K, and whole numbers with TSCAL, TZERO or TNULL, are Float64 (NaN for
   * the null value); L is true, false or null; A is one text a row, without what follows a NUL and trailing blanks. */
  data: ColumnData;
}

export interface FitsTable {
  nRows: number;
  columns: FitsColumn[];
  header: Header;
  primaryHeader: Header;
  hduIndex: number;
  warnings: string[];
}

export interface TableOptions {
  /** Only these, by name; default: all. */
  columns?: readonly string[] | undefined;
  /** What to call bytes in messages. */
  name?: string | undefined;
}

/** One binary table. `input`: as for `readImage`; `hdu`: number from 0, or EXTNAME.
 * @throws FitsError when the HDU is no binary table, or holds columns of a kind that is not read (X, C, M, P, Q). */
export function readTable(
  input: string | Uint8Array,
  hdu: number | string,
  options: TableOptions = {},
): Promise<FitsTable> {
  return withFits(input, options.name, (fits) => {
    const found = findHdu(fits, hdu);
    requireReadable(found);
    const places = wantedColumns(found, options.columns);
    const stored = readData(fits, found);
    const columns = places.map((place) => new ColumnReader(fits, found, stored, place).read());
    if (checkSums(fits, found, sumOfData(fits, found, stored)).state === "wrong") {
      fits.warnings.push(
        `${fits.source.name}: HDU ${found.index}: the checksum is wrong; the file has been changed or damaged.`,
      );
    }
    return {
      nRows: found.axes[1],
      columns,
      header: found.header,
      primaryHeader: fits.hdus[0].header,
      hduIndex: found.index,
      warnings: fits.warnings,
    };
  });
}

function requireReadable(hdu: ScannedHdu): void {
  const place = hdu.header.place;
  if (hdu.type !== "BINTABLE") {
    const kind = hdu.type === "TABLE" ? "an ASCII table" : hdu.type === "PRIMARY" ? "the primary HDU" : hdu.type;
    throw new FitsError("unsupported", `this is ${kind}, not a binary table`, "choose another HDU", place);
  }
  const n = hdu.header.integer("TFIELDS") ?? 0;
  if (n > MAX_COLUMNS) {
    throw new FitsError("unsupported", `the table has ${n} columns`, `up to ${MAX_COLUMNS} are read`, place);
  }
}

function wantedColumns(hdu: ScannedHdu, names: readonly string[] | undefined): ColumnPlace[] {
  const all = placeColumns(hdu);
  if (names === undefined) return all;
  return names.map((name) => {
    const column = all.find((one) => one.name.toUpperCase() === name.toUpperCase());
    if (column !== undefined) return column;
    const there = all.map((one) => one.name).join(", ") || "none";
    throw new FitsError("not-found", `there is no column ${name}`, `the table has ${there}`, hdu.header.place);
  });
}

class ColumnReader {
  private readonly view: DataView;
  private readonly nRows: number;
  private readonly rowBytes: number;

  constructor(
    private readonly fits: OpenFits,
    private readonly hdu: ScannedHdu,
    private readonly stored: Uint8Array,
    private readonly place: ColumnPlace,
  ) {
    this.view = new DataView(stored.buffer, stored.byteOffset, stored.byteLength);
    [this.rowBytes, this.nRows] = hdu.axes;
  }

  read(): FitsColumn {
    const { number, name, type, repeat } = this.place;
    const unit = (this.hdu.header.text(`TUNIT${number}`) ?? "").trim();
    return { name, unit, repeat: type === "A" ? 1 : repeat, data: this.data(type) };
  }

  private data(type: string): ColumnData {
    if (type === "A") return Array.from({ length: this.nRows }, (_, row) => this.text(row));
    if (type === "L") return this.logicals();
    if (type === "K") return this.scaled(this.longs());
    if (type === "E" || type === "D") return this.hasScaling() ? this.scaled(this.native(type)) : this.native(type);
    if (type === "B" || type === "I" || type === "J") return this.scaled(this.native(type));
    const kinds: Record<string, string> = { X: "bits", C: "complex numbers", M: "complex numbers" };
    const kind = kinds[type] ?? "arrays of variable length";
    const finding = `column ${this.place.name || this.place.number} holds ${kind} (${this.place.format}), which are not read`;
    throw new FitsError("unsupported", finding, "ask for the other columns by name", this.hdu.header.place);
  }

  /** Offsets of the column's fields. */
  private at(row: number, k: number): number {
    return row * this.rowBytes + this.place.at + k * ELEMENT_BYTES[this.place.type];
  }

  /** B, I, J, E and D by the accessors of fitsjs. */
  private native(type: "B" | "I" | "J" | "E" | "D") {
    const { repeat, number } = this.place;
    const make = { B: Uint8Array, I: Int16Array, J: Int32Array, E: Float32Array, D: Float64Array }[type];
    const out = new make(this.nRows * repeat);
    if (out.length === 0) return out;
    const accessor = this.fits.data[this.hdu.index]?.accessors?.[number - 1];
    if (accessor === undefined) {
      throw new FitsError(
        "unsupported",
        `column ${number} cannot be reached`,
        "check the TFORM cards",
        this.hdu.header.place,
      );
    }
    for (let row = 0; row < this.nRows; row++) {
      const [value] = accessor(this.view, this.at(row, 0));
      if (repeat === 1) out[row] = value as number;
      else out.set(value as number[], row * repeat);
    }
    return out;
  }

  private longs(): Float64Array {
    const { repeat, name } = this.place;
    const unsigned = this.offset() === 2 ** 63 ? 2n ** 63n : 0n;
    const out = new Float64Array(this.nRows * repeat);
    for (let i = 0; i < out.length; i++) {
      const value = this.view.getBigInt64(this.at(Math.floor(i / repeat), i % repeat)) + unsigned;
      out[i] = Number(value);
      if (BigInt(out[i]) !== value) {
        const finding = `column ${name} holds ${value}, beyond what a double counts exactly`;
        throw new FitsError("unsupported", finding, "ask for the other columns by name", this.hdu.header.place);
      }
    }
    return out;
  }

  private logicals(): (boolean | null)[] {
    const { repeat } = this.place;
    return Array.from({ length: this.nRows * repeat }, (_, i) => {
      const code = this.view.getUint8(this.at(Math.floor(i / repeat), i % repeat));
      return code === 84 ? true : code === 70 ? false : null;
    });
  }

  private text(row: number): string {
    const from = this.at(row, 0);
    const bytes = this.stored.subarray(from, from + this.place.repeat);
    const end = bytes.indexOf(0);
    return Buffer.from(end < 0 ? bytes : bytes.subarray(0, end))
      .toString("latin1")
      .trimEnd();
  }

  private hasScaling(): boolean {
    return this.scale() !== 1 || this.offset() !== 0;
  }

  private scale(): number {
    return this.hdu.header.number(`TSCAL${this.place.number}`) ?? 1;
  }

  private offset(): number {
    return this.hdu.header.number(`TZERO${this.place.number}`) ?? 0;
  }

  private scaled<T extends Uint8Array | Int16Array | Int32Array | Float32Array | Float64Array>(
    raw: T,
  ): T | Float64Array {
    const isInteger = !"ED".includes(this.place.type);
    const nullValue = isInteger ? this.hdu.header.number(`TNULL${this.place.number}`) : undefined;
    // The unsigned offset of K was added exactly where it was read.
    const unsigned = this.place.type === "K" && this.offset() === 2 ** 63;
    const [scale, zero] = [this.scale(), unsigned ? 0 : this.offset()];
    const nullRead = unsigned && nullValue !== undefined ? nullValue + 2 ** 63 : nullValue;
    if (scale === 1 && zero === 0 && nullRead === undefined) return raw;
    return Float64Array.from(raw, (v) => (v === nullRead ? Number.NaN : zero + scale * v));
  }
}
