/** What goes wrong with a FITS file: one sentence that says what was found, what was expected and what to do. */

export type FitsErrorCode =
  /** The file cannot be opened, read or decompressed. */
  | "unreadable"
  /** It ends before its own header says that it should. */
  | "truncated"
  /** Its block structure or a mandatory keyword is not what the FITS Standard 4.0 asks for. */
  | "structure"
  /** A header card cannot be understood, or holds another type of value than is needed. */
  | "card"
  /** The HDU, column or section that was asked for is not there. */
  | "not-found"
  /** Valid FITS, but of a kind that is not read here. */
  | "unsupported"
  /** The pixels or rows themselves are damaged (compressed tiles that do not unpack). */
  | "data"
  /** The output may not or cannot be written. */
  | "output";

/** Where it went wrong, as far as that is known. */
export interface FitsPlace {
  file?: string | undefined;
  /** HDU, counted from 0. */
  hdu?: number | undefined;
  /** Bytes from the start of the (uncompressed) file. */
  byteOffset?: number | undefined;
  /** Keyword of the card concerned. */
  card?: string | undefined;
}

/** `message` reads `file: HDU n: finding; remedy.`, one sentence on one line. */
export class FitsError extends Error {
  override readonly name = "FitsError";
  readonly file: string | undefined;
  readonly hdu: number | undefined;
  readonly byteOffset: number | undefined;
  readonly card: string | undefined;

  constructor(
    readonly code: FitsErrorCode,
    readonly finding: string,
    readonly remedy: string,
    place: FitsPlace = {},
  ) {
    const hdu = place.hdu === undefined ? "" : `HDU ${place.hdu}: `;
    super(printable(`${place.file === undefined ? "" : `${place.file}: `}${hdu}${finding}; ${remedy}.`));
    this.file = place.file;
    this.hdu = place.hdu;
    this.byteOffset = place.byteOffset;
    this.card = place.card;
  }
}

/** Damaged files put control characters into what is quoted from them; a message stays on its line. */
function printable(text: string): string {
  return text.replace(/\p{Cc}/gu, "?");
}
