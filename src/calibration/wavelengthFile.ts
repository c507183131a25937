/** Wavelengths as a FITS file: a primary without data, the table WAVELENGTHS with a row a slit position, and the table LINES with every
 * line of every fibre that they were made from, to be looked at. */

import { historyCards, inputCards } from "../fits/carry.js";
import type { OutputHdu } from "../fits/encode.js";
import { FitsError } from "../fits/errors.js";
import type { Card, Header } from "../fits/header.js";
import { type FitsTable, readTable } from "../fits/table.js";
import { writeFits } from "../fits/write.js";
import type { ArcResult } from "./arc.js";
import { rmsOf } from "./arcWarnings.js";
import type { WavelengthSolution } from "./wavelengths.js";

/** Raised when a reader of the file would have to change. */
const formatVersion = 1;
const remedy = "reduce the arc again with this program";

export interface WavelengthFileOptions {
  /** The program's version, for HISTORY. */
  version: string;
  /** Options that change numbers, one line each, for HISTORY. */
  options: string[];
  /** Arcs, tramlines and calibration frames, for HISTORY. */
  inputs: { name: string; checksum: string }[];
  /** The first arc's header, whose keywords are carried over. */
  header?: Header | undefined;
}

/** All HDUs of the product, for `writeFits` or `encodeFits`. */
export function wavelengthHdus(result: ArcResult, options: WavelengthFileOptions): OutputHdu[] {
  const { solution } = result;
  const { nFibre, degree, fwhmDegree } = solution;
  const filled = new Set(result.fit.filled);
  const state = Array.from({ length: nFibre }, (_, k) =>
    Number.isNaN(solution.legendre[k * (degree + 1)]) ? "none" : filled.has(k) ? "filled" : "fitted",
  );
  return [
    { kind: "primary", header: primaryCards(result, options) },
    {
      kind: "table",
      name: "WAVELENGTHS",
      cards: [
        { keyword: "PIXORIG", value: 0, comment: "pixel numbers in this table count from 0" },
        { keyword: "DEGREE", value: degree, comment: "of the Legendre series lambda(x)" },
        { keyword: "COMMENT", comment: "STATE: fitted, filled (from the neighbours: too few lines of its own), none." },
      ],
      columns: [
        { name: "FIBRE", format: "1J", data: Int32Array.from(state, (_, k) => k + 1) },
        { name: "STATE", format: "8A", data: state },
        { name: "LEGENDRE", format: `${degree + 1}D`, data: solution.legendre, unit: "Angstrom" },
        { name: "NLINE", format: "1J", data: solution.nLine },
        { name: "RMS", format: "1D", data: solution.rms, unit: "pixel" },
        { name: "ERROR", format: "1D", data: solution.error ?? nans(nFibre), unit: "pixel" },
        { name: "SEEN_FROM", format: "1D", data: solution.seenFrom, unit: "pixel" },
        { name: "SEEN_TO", format: "1D", data: solution.seenTo, unit: "pixel" },
        { name: "FWHM", format: `${fwhmDegree + 1}D`, data: solution.fwhm, unit: "pixel" },
      ],
    },
    linesHdu(result),
  ];
}

function linesHdu({ lines, list }: ArcResult): OutputHdu {
  const doubles = (value: (one: (typeof lines)[0]) => number) => Float64Array.from(lines, value);
  return {
    kind: "table",
    name: "LINES",
    cards: [
      { keyword: "PIXORIG", value: 0, comment: "pixel numbers in this table count from 0" },
      {
        keyword: "COMMENT",
        comment: "RESIDUAL: columns by which a line was seen beyond where the fit has it.",
      },
      { keyword: "COMMENT", comment: "WHY: what kept a line with USED = 0 out of the fit." },
    ],
    columns: [
      { name: "FIBRE", format: "1J", data: Int32Array.from(lines, ({ fibre }) => fibre + 1) },
      { name: "EXPOSURE", format: "1J", data: Int32Array.from(lines, ({ exposure }) => exposure + 1) },
      { name: "WAVELENGTH", format: "1D", data: doubles(({ line }) => list.wavelength[line]), unit: "Angstrom" },
      { name: "LAMP", format: "8A", data: lines.map(({ line }) => list.lamp[line].slice(0, 8)) },
      { name: "X", format: "1D", data: doubles(({ peak }) => peak.x), unit: "pixel" },
      { name: "ERROR", format: "1D", data: doubles(({ peak }) => peak.error), unit: "pixel" },
      { name: "RESIDUAL", format: "1D", data: doubles(({ residual }) => residual), unit: "pixel" },
      { name: "FWHM", format: "1D", data: doubles(({ peak }) => peak.fwhm), unit: "pixel" },
      { name: "ELECTRONS", format: "1D", data: doubles(({ peak }) => peak.electrons), unit: "electron" },
      { name: "USED", format: "1J", data: Int32Array.from(lines, ({ used }) => (used ? 1 : 0)) },
      { name: "WHY", format: "12A", data: lines.map(({ why }) => why) },
    ],
  };
}

function primaryCards({ solution, lines, fit, list }: ArcResult, options: WavelengthFileOptions): Card[] {
  const own: Card[] = [
    { keyword: "WAVEVERS", value: formatVersion, comment: "format of this file" },
    { keyword: "TRAMGEOM", value: solution.geometryDigest, comment: "digest of the detector's geometry" },
    { keyword: "WAVENX", value: solution.nx, comment: "columns of the frame, along dispersion" },
    { keyword: "WAVEMED", value: solution.medium, comment: "wavelengths in air or vacuum" },
    { keyword: "WAVERMS", value: rmsOf(lines), comment: "[pixel] rms of all lines about the fit" },
    { keyword: "WAVEFIB", value: fit.scatters.fibre, comment: "[pixel] scatter of fibres' own offsets" },
    { keyword: "WAVELIST", value: fit.scatters.line, comment: "[Angstrom] scatter of the list's wavelengths" },
    { keyword: "COMMENT", comment: `Line list: ${list.source}`.replace(/[^ -~]/g, "?") },
  ];
  fit.exposure.forEach((offset, i) => {
    if (i > 0 && i < 100) {
      own.push({ keyword: `WAVEOF${i + 1}`, value: offset, comment: `[pixel] arc ${i + 1} against the first` });
    }
  });
  const taken = new Set(own.map((card) => card.keyword));
  const carried = options.header === undefined ? [] : inputCards(options.header);
  return [
    ...carried.filter((card) => card.keyword === "COMMENT" || !taken.has(card.keyword)),
    ...own,
    ...historyCards(options.version, options.options, options.inputs),
  ];
}

/** Writes the product whole or not at all.
 * @throws FitsError when `path` exists and `force` is not set, is one of `inputs`, or cannot be written. */
export async function writeWavelengths(
  path: string,
  result: ArcResult,
  options: WavelengthFileOptions,
  write: { force?: boolean | undefined; inputs?: string[] | undefined } = {},
): Promise<void> {
  await writeFits(path, wavelengthHdus(result, options), write);
}

/** Reads wavelengths back.
 * @throws FitsError when the file holds none, in a newer format, or in a state that cannot be. */
export async function readWavelengths(input: string | Uint8Array, name?: string): Promise<WavelengthSolution> {
  const file = typeof input === "string" ? input : (name ?? "the wavelengths");
  const table = await readTable(input, "WAVELENGTHS", { name });
  const { primaryHeader: primary, nRows: nFibre } = table;
  const version = primary.integer("WAVEVERS") ?? 0;
  if (version < 1 || version > formatVersion) {
    const finding =
      version < 1 ? "this is no file of wavelengths" : `format ${version}, but ${formatVersion} is the newest known`;
    throw new FitsError("unsupported", finding, remedy, { file });
  }
  const medium = primary.get("WAVEMED");
  if (medium !== "air" && medium !== "vacuum") {
    const finding = `wavelengths in ${String(medium)}, but air or vacuum is expected`;
    throw new FitsError("data", finding, remedy, { file });
  }
  const column = (wanted: string) => columnOf(table, wanted, file);
  const doubles = (wanted: string) => Float64Array.from(column(wanted).data as ArrayLike<number>);
  const solution: WavelengthSolution = {
    nFibre,
    nx: primary.integer("WAVENX") ?? 0,
    medium,
    degree: column("LEGENDRE").repeat - 1,
    legendre: doubles("LEGENDRE"),
    nLine: Int32Array.from(doubles("NLINE")),
    rms: doubles("RMS"),
    seenFrom: doubles("SEEN_FROM"),
    seenTo: doubles("SEEN_TO"),
    error: doubles("ERROR"),
    fwhmDegree: column("FWHM").repeat - 1,
    fwhm: doubles("FWHM"),
    geometryDigest: String(primary.get("TRAMGEOM") ?? ""),
  };
  checkContent(solution, doubles("FIBRE"), file);
  return solution;
}

function columnOf(table: FitsTable, wanted: string, file: string) {
  const column = table.columns.find(({ name }) => name === wanted);
  if (column !== undefined) return column;
  throw new FitsError("not-found", `there is no column ${wanted}`, remedy, { file, hdu: table.hduIndex });
}

function checkContent(solution: WavelengthSolution, fibre: Float64Array, file: string): void {
  const misplaced = fibre.findIndex((number, k) => number !== k + 1);
  if (misplaced >= 0) {
    const finding = `row ${misplaced + 1} is fibre ${fibre[misplaced]}, but rows must follow the slit from 1`;
    throw new FitsError("data", finding, remedy, { file });
  }
  const { legendre, degree, nx } = solution;
  const whole = fibre.every((_, k) => {
    const row = legendre.subarray(k * (degree + 1), (k + 1) * (degree + 1));
    return row.every(Number.isFinite) || row.every(Number.isNaN);
  });
  if (!whole || nx < 2 || legendre.every(Number.isNaN)) {
    throw new FitsError("data", "coefficients or sizes are missing or not finite", remedy, { file });
  }
}

function nans(n: number): Float64Array {
  return new Float64Array(n).fill(Number.NaN);
}
