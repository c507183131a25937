/** Names of frames and of what is made of them. */
import { basename } from "node:path";

const FITS_NAME = /\.(fits?|fts)(\.(gz|fz))?$/i;

/** Whether a file's name says that it is a FITS file; hidden files are somebody's business in progress. */
export function isFrameName(name: string): boolean {
  return FITS_NAME.test(name) && !name.startsWith(".");
}

/** sci_01.fits.gz → sci_01 */
export function stemOf(path: string): string {
  return basename(path).replace(FITS_NAME, "");
}

/** A field's name as part of a file's: what is no letter, digit, dot, plus or underscore becomes a hyphen. */
export function fileWord(name: string): string {
  return name.replace(/[^A-Za-z0-9._+]+/g, "-").replace(/^[-.]+|-+$/g, "") || "field";
}
