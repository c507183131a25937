/** What a product takes over from its inputs' headers, and what it says of how it was made. */
import type { Card, Header } from "./header.js";

/** Describe the bytes of one HDU and mean nothing, or a falsehood, in another file. */
const STRUCTURAL = new Set(
  (
    "SIMPLE XTENSION BITPIX NAXIS EXTEND PCOUNT GCOUNT GROUPS TFIELDS THEAP END BSCALE BZERO BLANK BUNIT DATAMIN DATAMAX " +
    "CHECKSUM DATASUM EXTNAME EXTVER EXTLEVEL INHERIT LONGSTRN BLOCKED " +
    "ZIMAGE ZTENSION ZSIMPLE ZEXTEND ZBITPIX ZNAXIS ZCMPTYPE ZQUANTIZ ZDITHER0 ZBLANK ZSCALE ZZERO ZMASKCMP ZPCOUNT " +
    "ZGCOUNT ZHECKSUM ZDATASUM ZTABLE ZTILELEN ZTHEAP FZALGOR FZTILE FZQVALUE FZQMETHD FZDTHRSD FZINT2F"
  ).split(" "),
);
const STRUCTURAL_INDEXED =
  /^(NAXIS|TTYPE|TFORM|TUNIT|TNULL|TSCAL|TZERO|TDISP|TDIM|TBCOL|TDMIN|TDMAX|TLMIN|TLMAX|PTYPE|PSCAL|PZERO|ZNAXIS|ZTILE|ZNAME|ZVAL|ZFORM|ZCTYP)\d+$/;

/** World coordinates of the input's pixels or columns (FITS Standard 4.0, section 8): a spectrum has other axes. */
const COORDINATES =
  /^(WCSAXES|CRPIX\d+|CRVAL\d+|CDELT\d+|CROTA\d+|CTYPE\d+|CUNIT\d+|CNAME\d+|CRDER\d+|CSYER\d+|(PC|CD|PV|PS)\d+_\d+)[A-Z]?$/;
const COLUMN_COORDINATES = /^(TCTYP|TCUNI|TCRVL|TCDLT|TCRPX|TCROT|TCNA|TCRD|TCSY|TPC|TCD)\d+(_\d+)?[A-Z]?$/;

/** True for keywords that the writer sets itself. */
export function isStructural(keyword: string): boolean {
  return STRUCTURAL.has(keyword) || STRUCTURAL_INDEXED.test(keyword);
}

const BOILERPLATE = /FITS \(Flexible Image Transport System\)|Astronomy and Astrophysics', volume 376/;

/** The input's own cards, without those of structure, scaling, compression, checksums and coordinates of its pixels, those
 * without a value, the boilerplate comments that point to the FITS papers, and all but the first of keywords that came
 * twice. A number under the deprecated EPOCH is carried as EQUINOX. */
export function inputCards(header: Header): Card[] {
  const seen = new Set<string>(header.has("EQUINOX") ? ["EPOCH"] : []);
  return header.cards.flatMap((card) => {
    const { keyword, value } = card;
    if (isStructural(keyword) || COORDINATES.test(keyword) || COLUMN_COORDINATES.test(keyword)) return [];
    if (value === undefined) return BOILERPLATE.test(card.comment) ? [] : [card];
    if (value === null || seen.has(keyword)) return [];
    seen.add(keyword);
    return keyword === "EPOCH" && typeof value === "number" ? [{ ...card, keyword: "EQUINOX" }] : [card];
  });
}

/** HISTORY of a product: the version, the options that change numbers, the inputs with their checksums.
 * Names lose their folders, so that the same inputs give the same bytes wherever they lie.
 * `options`: written as given, one line each; pass neither times, thread counts nor paths. */
export function historyCards(
  version: string,
  options: readonly string[],
  inputs: readonly { name: string; checksum: string }[],
): Card[] {
  const lines = [
    `made by hatchel ${version}`,
    ...options.map((option) => `option ${option}`),
    ...inputs.map(({ name, checksum }) => `input ${baseName(name)} checksum ${checksum}`),
  ];
  return lines.map((line) => ({ keyword: "HISTORY", comment: line.replace(/[^ -~]/gu, "?") }));
}

function baseName(path: string): string {
  return path.slice(Math.max(path.lastIndexOf("/"), path.lastIndexOf("\\")) + 1);
}
