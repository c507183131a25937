/** Where the columns of a binary table lie in its rows (FITS Standard 4.0, section 7.3). */
import { FitsError } from "./errors.js";
import type { ScannedHdu } from "./scan.js";

export interface ColumnPlace {
  /** From 1, as in TTYPEn. */
  number: number;
  /** TTYPEn; empty when there is none. */
  name: string;
  /** TFORMn as it stands in the header. */
  format: string;
  /** L X B I J K A E D C M P Q. */
  type: string;
  repeat: number;
  /** Of the elements in the heap, for P and Q. */
  heapType: string;
  /** Bytes from the start of a row. */
  at: number;
}

export const ELEMENT_BYTES: Record<string, number> = {
  L: 1,
  B: 1,
  A: 1,
  I: 2,
  J: 4,
  K: 8,
  E: 4,
  D: 8,
  C: 8,
  M: 16,
  P: 8,
  Q: 16,
};

/** Every column's place.
 * @throws FitsError when a TFORM is none, or the columns do not fill the row. */
export function placeColumns(hdu: ScannedHdu): ColumnPlace[] {
  const n = hdu.header.integer("TFIELDS") ?? 0;
  let at = 0;
  const columns: ColumnPlace[] = [];
  for (let number = 1; number <= n; number++) {
    const format = (hdu.header.text(`TFORM${number}`) ?? "").trim();
    const match = /^(\d*)([LXBIJKAEDCMPQ])([A-Z]?)/.exec(format);
    if (match === null) {
      const finding = `TFORM${number} is '${format}'`;
      throw new FitsError("card", finding, "it must be a count and a letter", {
        ...hdu.header.place,
        card: `TFORM${number}`,
      });
    }
    const [, count, type, heapType] = match;
    const repeat = count === "" ? 1 : Number(count);
    const name = (hdu.header.text(`TTYPE${number}`) ?? "").trim();
    columns.push({ number, name, format, type, repeat, heapType, at });
    at += type === "X" ? Math.ceil(repeat / 8) : repeat * ELEMENT_BYTES[type];
  }
  if (at !== hdu.axes[0]) {
    const finding = `the columns fill ${at} bytes of rows of ${hdu.axes[0]}`;
    throw new FitsError("structure", finding, "repair NAXIS1 or TFORMn", hdu.header.place);
  }
  return columns;
}
