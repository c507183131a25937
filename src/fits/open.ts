/** Opening a FITS file: source, strict scan, gate; then finding an HDU in it by number or name. */
import { createHash } from "node:crypto";
import { addChecksums, checksum } from "./checksum.js";
import { FitsError } from "./errors.js";
import { type GatedData, passGate } from "./gate.js";
import type { Header } from "./header.js";
import { type ScannedHdu, scanFits } from "./scan.js";
import { openSource, type Source } from "./source.js";

export interface OpenFits {
  source: Source;
  hdus: ScannedHdu[];
  /** Of each HDU; null where there are no data. */
  data: (GatedData | null)[];
  warnings: string[];
}

/** Runs `work` on an open file and closes it, whatever happens.
 * `input`: a path, "-" for standard input, or bytes; gzip or not. `name`: what to call bytes in messages.
 * @throws FitsError when the file is not sound. */
export async function withFits<T>(
  input: string | Uint8Array,
  name: string | undefined,
  work: (fits: OpenFits) => T | Promise<T>,
): Promise<T> {
  const source = await openSource(input, name);
  try {
    const { hdus, warnings } = scanFits(source);
    const data = await passGate(source, hdus);
    return await work({ source, hdus, data, warnings });
  } finally {
    source.close();
  }
}

/** HDU by number from 0 or by EXTNAME (letter case does not matter); a string of digits is a number unless an HDU has
 * that name.
 * @throws FitsError naming what there is instead. */
export function findHdu(fits: OpenFits, wanted: number | string): ScannedHdu {
  const named = fits.hdus.filter((hdu) => hdu.name.toUpperCase() === String(wanted).trim().toUpperCase());
  if (typeof wanted === "string" && wanted.trim() !== "" && named.length > 0) {
    if (named.length > 1) {
      const which = named.map((hdu) => hdu.index).join(" and ");
      fits.warnings.push(`${fits.source.name}: HDUs ${which} are all called ${wanted}; the first is used.`);
    }
    return named[0];
  }
  const hdu = /^\d+$/.test(String(wanted)) ? fits.hdus[Number(wanted)] : undefined;
  if (hdu !== undefined) return hdu;
  const there = fits.hdus.map((one) => (one.name === "" ? `${one.index}` : `${one.index} ${one.name}`)).join(", ");
  const finding = `there is no HDU ${typeof wanted === "number" ? wanted : `"${wanted}"`}`;
  throw new FitsError("not-found", finding, `choose among ${there}`, { file: fits.source.name });
}

export type ChecksumState = "absent" | "right" | "wrong";

/** What the CHECKSUM and DATASUM cards say of the HDU, given the sum over its data, and a digest of header and data. */
export function checkSums(fits: OpenFits, hdu: ScannedHdu, dataSum: number): { state: ChecksumState; digest: string } {
  const headerBytes = new Uint8Array(hdu.dataOffset - hdu.headerOffset);
  fits.source.readInto(headerBytes, hdu.headerOffset);
  const digest = createHash("sha256").update(headerBytes).update(String(dataSum)).digest("hex").slice(0, 16);
  const saidOfData = hdu.header.get("DATASUM");
  const saidOfAll = hdu.header.get("CHECKSUM");
  const isSaid = (value: unknown) => value !== undefined && value !== null && value !== "";
  if (!isSaid(saidOfData) && !isSaid(saidOfAll)) return { state: "absent", digest };
  const whole = addChecksums(checksum(headerBytes), dataSum);
  const dataRight = !isSaid(saidOfData) || Number(saidOfData) === dataSum;
  // −0, all bits set, is what a right CHECKSUM brings about.
  const wholeRight = !isSaid(saidOfAll) || whole === 0xffffffff;
  return { state: dataRight && wholeRight ? "right" : "wrong", digest };
}

/** The sum over an HDU's data, `bytes`, and their padding. `sumOf` sums whole words. */
export function sumOfData(fits: OpenFits, hdu: ScannedHdu, bytes: Uint8Array, sumOf = checksum): number {
  const end = hdu.dataOffset + hdu.dataBytes;
  const padding = Math.min((2880 - (hdu.dataBytes % 2880)) % 2880, fits.source.size - end);
  const rest = new Uint8Array((hdu.dataBytes % 4) + padding);
  rest.set(bytes.subarray(bytes.length - (hdu.dataBytes % 4)));
  if (padding > 0) fits.source.readInto(rest.subarray(hdu.dataBytes % 4), end);
  return checksum(rest, sumOf(bytes.subarray(0, bytes.length - (hdu.dataBytes % 4))));
}

/** An HDU's data as they are stored. */
export function readData(fits: OpenFits, hdu: ScannedHdu): Uint8Array {
  const data = fits.data[hdu.index];
  const bytes = new Uint8Array(data?.nBytes ?? 0);
  if (data) fits.source.readInto(bytes, data.offset);
  return bytes;
}

/** One line of a file's table of contents. */
export interface HduSummary {
  index: number;
  /** "PRIMARY", "IMAGE", "BINTABLE", "TABLE", or what else XTENSION says. */
  type: string;
  /** EXTNAME; empty when there is none. */
  name: string;
  bitpix: number;
  /** NAXIS1, NAXIS2, … as stored: of a compressed image, those of its table. */
  axes: number[];
  header: Header;
}

/** What is in a file, without reading any data. `input`, `name`: as for `withFits`.
 * @throws FitsError when the file is not sound. */
export function listHdus(
  input: string | Uint8Array,
  name?: string,
): Promise<{ hdus: HduSummary[]; warnings: string[] }> {
  return withFits(input, name, ({ hdus, warnings }) => ({
    hdus: hdus.map((hdu) => ({
      index: hdu.index,
      type: hdu.type,
      name: hdu.name,
      bitpix: hdu.bitpix,
      axes: hdu.axes,
      header: hdu.header,
    })),
    warnings,
  }));
}
