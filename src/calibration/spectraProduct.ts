/** A file of spectra, raw or calibrated, with all that later steps carry on: wavelengths, sky, roles of the fibres, targets.
 *
 * Beyond what extraction writes these HDUs are known: WAVELENGTH, SKY; COLUMN_COV, covariance with the next column, which
 * frames moved to one another's wavelengths have; BIN_COV, the same of rebinned spectra. */
import { createHash } from "node:crypto";
import { readFileSync } from "node:fs";
import { basename } from "node:path";
import { readSpectra } from "../extraction/file.js";
import type { Spectra } from "../extraction/spectra.js";
import type { Target } from "../extraction/targets.js";
import type { OutputColumn } from "../fits/encode.js";
import { FitsError } from "../fits/errors.js";
import type { Header } from "../fits/header.js";
import { readImage } from "../fits/image.js";
import { listHdus } from "../fits/open.js";
import { type FitsColumn, type FitsTable, readTable } from "../fits/table.js";
import type { Medium } from "./medium.js";

/** Å of every pixel, nFibre × nx; NaN in rows of fibres without a solution. */
export interface PixelWavelengths {
  medium: Medium;
  image: Float64Array;
}

export interface SpectraProduct {
  /** The file's name without its folder. */
  name: string;
  /** Of the spectra themselves: the same spectra, the same checksum. */
  checksum: string;
  primaryHeader: Header;
  spectra: Spectra;
  wavelengths?: PixelWavelengths;
  /** nFibre × nx, e⁻ taken off. */
  sky?: Float32Array;
  /** nFibre × nx, e⁻², cov(x, x + 1). */
  columnCovariance?: Float32Array;
  /** Whether its columns are bins of a common grid. */
  rebinned: boolean;
  positions: FitsTable;
  targets: { target: Target; neglected: number }[];
}

/** Reads the product. `path`: "-" is standard input.
 * @throws FitsError when it is none. */
export async function readProduct(path: string): Promise<SpectraProduct> {
  // What can be read once only is read first: a product has many HDUs.
  const input = path === "-" ? readFileSync(process.stdin.fd) : path;
  const name = path === "-" ? "standard input" : basename(path);
  const { hdus } = await listHdus(input, name);
  const has = new Set(hdus.map((hdu) => hdu.name.toUpperCase()));
  const spectra = await readSpectra(input, name);
  const single = async (hdu: string) => Float32Array.from((await readImage(input, { hdu, name })).data);
  const covariance = ["COLUMN_COV", "BIN_COV"].find((hdu) => has.has(hdu));
  const product: SpectraProduct = {
    name,
    checksum: createHash("sha256")
      .update(bytesOf(spectra.flux))
      .update(bytesOf(spectra.variance))
      .digest("hex")
      .slice(0, 16),
    primaryHeader: hdus[0].header,
    spectra,
    rebinned: has.has("BIN_COV"),
    positions: await readTable(input, "POSITIONS", { name }),
    targets: has.has("TARGETS") ? readTargets(await readTable(input, "TARGETS", { name })) : [],
  };
  if (has.has("WAVELENGTH")) product.wavelengths = await readPixelWavelengths(input, name, spectra);
  if (has.has("SKY")) product.sky = await single("SKY");
  if (covariance !== undefined) product.columnCovariance = await single(covariance);
  return product;
}

async function readPixelWavelengths(
  input: string | Uint8Array,
  name: string,
  { nFibre, nx }: Spectra,
): Promise<PixelWavelengths> {
  const image = await readImage(input, { hdu: "WAVELENGTH", name });
  const medium = (image.header.text("MEDIUM") ?? "").toLowerCase();
  if (medium !== "air" && medium !== "vacuum") {
    const finding = `MEDIUM is ${medium === "" ? "missing" : `'${medium}'`}, so that wavelengths may be in air or in vacuum`;
    throw new FitsError("card", finding, "set it to 'air' or 'vacuum'", { ...image.header.place, card: "MEDIUM" });
  }
  if (image.nx !== nx || image.ny !== nFibre) {
    const finding = `WAVELENGTH has ${image.nx} × ${image.ny} pixels and FLUX ${nx} × ${nFibre}`;
    throw new FitsError("data", finding, "calibrate the spectra again", image.header.place);
  }
  return { medium, image: Float64Array.from(image.data) };
}

function readTargets({ columns, nRows }: FitsTable): SpectraProduct["targets"] {
  const column = (name: string) => columns.find((one) => one.name === name)?.data ?? [];
  return Array.from({ length: nRows }, (_, i) => ({
    target: {
      name: String(column("NAME")[i]),
      fibres: String(column("FIBRES")[i])
        .split(",")
        .filter((text) => text !== "")
        .map(Number),
    },
    neglected: Number(column("NEGLECTED")[i] ?? Number.NaN),
  }));
}

function bytesOf(numbers: Float32Array | Float64Array): Uint8Array {
  return new Uint8Array(numbers.buffer, numbers.byteOffset, numbers.byteLength);
}

/** A column of POSITIONS by its name. */
export function positionColumn(product: SpectraProduct, name: string): FitsColumn["data"] | undefined {
  return product.positions.columns.find((column) => column.name === name)?.data;
}

/** POSITIONS as it was, without the columns that no longer hold, with those that are given. */
export function carriedPositions(product: SpectraProduct, drop: string[], replaced: OutputColumn[]): OutputColumn[] {
  const own = new Map(replaced.map((column) => [column.name, column]));
  return product.positions.columns
    .filter(({ name }) => !drop.includes(name))
    .map((column) => own.get(column.name) ?? outputColumn(column));
}

function outputColumn({ name, unit, repeat, data }: FitsColumn): OutputColumn {
  const texts = typeof data[0] === "string" ? (data as string[]) : undefined;
  const width = texts && Math.max(8, ...texts.map((text) => text.length));
  const type = LETTER.find(([kind]) => data instanceof kind)?.[1] ?? "L";
  return {
    name,
    format: texts ? `${width}A` : `${repeat}${type}`,
    data: data as OutputColumn["data"],
    ...(unit === "" ? {} : { unit }),
  };
}

const LETTER = [
  [Uint8Array, "B"],
  [Int16Array, "I"],
  [Int32Array, "J"],
  [Float32Array, "E"],
  [Float64Array, "D"],
] as const;
