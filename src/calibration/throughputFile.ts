/** Relative throughput as a FITS file: two images with a row a slit position, and a table with each fibre's level. */
import { medianOf } from "../detector/clip.js";
import { historyCards, inputCards } from "../fits/carry.js";
import type { OutputHdu } from "../fits/encode.js";
import { FitsError } from "../fits/errors.js";
import type { Card, Header } from "../fits/header.js";
import { readImage } from "../fits/image.js";
import { writeFits } from "../fits/write.js";
import type { Throughput } from "./throughput.js";

/** Raised when a reader of the file would have to change. */
const FORMAT_VERSION = 1;

export interface ThroughputFileOptions {
  /** The program's version, for HISTORY. */
  version: string;
  /** Options that change numbers, one line each, for HISTORY. */
  options: string[];
  inputs: { name: string; checksum: string }[];
  /** The first frame's header, whose keywords are carried over. */
  header?: Header | undefined;
}

/** Median over x of each fibre's relative throughput; NaN for dead ones. */
export function fibreLevels({ nFibre, nx, relative }: Throughput): Float64Array {
  return Float64Array.from({ length: nFibre }, (_, k) => medianOf(relative.subarray(k * nx, (k + 1) * nx)));
}

/** All HDUs of the product, for `writeFits` or `encodeFits`. */
export function throughputHdus(throughput: Throughput, options: ThroughputFileOptions): OutputHdu[] {
  const { nFibre, nx, relative, variance, geometryDigest } = throughput;
  const own: Card[] = [
    { keyword: "THRUVERS", value: FORMAT_VERSION, comment: "format of this file" },
    { keyword: "TRAMGEOM", value: geometryDigest, comment: "digest of the detector's geometry" },
  ];
  const taken = new Set(own.map((card) => card.keyword));
  const carried = options.header === undefined ? [] : inputCards(options.header);
  const image = (name: string, data: Float32Array, comment: string): OutputHdu => ({
    ...{ kind: "image", name, nx, ny: nFibre, data },
    cards: [{ keyword: "COMMENT", comment }],
  });
  return [
    {
      kind: "primary",
      header: [
        ...carried.filter((card) => !taken.has(card.keyword)),
        ...own,
        ...historyCards(options.version, options.options, options.inputs),
      ],
    },
    image(
      "THROUGHPUT",
      relative,
      "Light passed on, relative to the median of the lit fibres at the same wavelength; NaN for dead fibres.",
    ),
    image("THROUGHPUT_VAR", variance, "Variance of THROUGHPUT; errors go on along a fibre."),
    {
      kind: "table",
      name: "POSITIONS",
      columns: [
        { name: "FIBRE", format: "1J", data: Int32Array.from({ length: nFibre }, (_, k) => k + 1) },
        { name: "THROUGHPUT", format: "1D", data: fibreLevels(throughput) },
      ],
    },
  ];
}

/** Writes the product whole or not at all.
 * @throws FitsError when `path` exists and `force` is not set, is one of `inputs`, or cannot be written. */
export async function writeThroughput(
  path: string,
  throughput: Throughput,
  options: ThroughputFileOptions,
  write: { force?: boolean | undefined; inputs?: string[] | undefined } = {},
): Promise<void> {
  await writeFits(path, throughputHdus(throughput, options), write);
}

/** @throws FitsError when the file holds no throughput, or in a newer format. */
export async function readThroughput(input: string | Uint8Array, name?: string): Promise<Throughput> {
  const file = typeof input === "string" ? input : (name ?? "the throughput");
  const relative = await readImage(input, { hdu: "THROUGHPUT", name });
  const version = relative.primaryHeader.integer("THRUVERS") ?? 0;
  if (version < 1 || version > FORMAT_VERSION) {
    const finding =
      version < 1 ? "this is no file of throughput" : `format ${version}, but ${FORMAT_VERSION} is the newest known`;
    throw new FitsError("unsupported", finding, "measure it again with 'hatchel throughput'", { file });
  }
  const variance = await readImage(input, { hdu: "THROUGHPUT_VAR", name });
  if (variance.nx !== relative.nx || variance.ny !== relative.ny) {
    const finding = `THROUGHPUT is ${relative.nx} × ${relative.ny}, but THROUGHPUT_VAR ${variance.nx} × ${variance.ny}`;
    throw new FitsError("data", finding, "measure it again with 'hatchel throughput'", { file });
  }
  return {
    nFibre: relative.ny,
    nx: relative.nx,
    relative: Float32Array.from(relative.data),
    variance: Float32Array.from(variance.data),
    geometryDigest: relative.primaryHeader.text("TRAMGEOM") ?? "",
  };
}
