/** Tramlines as a FITS file: a primary without data, the table TRAMLINES with a row a slit position, and what the
 * profile model needs in HDUs whose names start with PROFILE. */
import type { Frame } from "../detector/frame.js";
import { historyCards, inputCards } from "../fits/carry.js";
import type { OutputHdu } from "../fits/encode.js";
import { FitsError } from "../fits/errors.js";
import type { Card, Header } from "../fits/header.js";
import { type FitsTable, readTable } from "../fits/table.js";
import { writeFits } from "../fits/write.js";
import { TraceError } from "./errors.js";
import { readShape, shapeHdus } from "./shape/file.js";
import { type FibreState, type Profile, type Tramlines, tramlineErrors } from "./tramlines.js";

/** Raised when a reader of the file would have to change. */
const FORMAT_VERSION = 1;
const STATES: readonly string[] = ["lit", "dim", "dead"];

export interface TramlinesFileOptions {
  /** The program's version, for HISTORY. */
  version: string;
  /** Options that change numbers, one line each, for HISTORY. */
  options: string[];
  /** The flats, for HISTORY. */
  inputs: { name: string; checksum: string }[];
  /** The flat's header, whose keywords are carried over. */
  header?: Header | undefined;
}

/** @throws TraceError when the tramlines come from another readout window than the frame. */
export function checkGeometry(frame: Frame, tramlines: Tramlines, name = "the tramlines"): void {
  const sameSize = frame.nx === tramlines.nx && frame.ny === tramlines.ny;
  if (sameSize && frame.geometry.digest === tramlines.geometryDigest) return;
  const window = sameSize ? " of another readout window (sections, axis or binning differ)" : "";
  throw new TraceError(
    `${frame.name}: ${frame.nx} × ${frame.ny} pixels, but ${name} belong to ${tramlines.nx} × ${tramlines.ny}${window}; ` +
      "trace a flat from the same readout window as the frame.",
  );
}

/** All HDUs of the product, for `writeFits` or `encodeFits`. */
export function tramlinesHdus(tramlines: Tramlines, options: TramlinesFileOptions): OutputHdu[] {
  const { profile, degree } = tramlines;
  return [
    { kind: "primary", header: primaryCards(tramlines, options) },
    {
      kind: "table",
      name: "TRAMLINES",
      cards: [
        { keyword: "PIXORIG", value: 0, comment: "pixel numbers in this table count from 0" },
        { keyword: "DEGREE", value: degree, comment: "of the Legendre series y(x)" },
      ],
      columns: [
        { name: "FIBRE", format: "1J", data: tramlines.fibre },
        { name: "STATE", format: "8A", data: tramlines.state },
        { name: "BLOCK", format: "1J", data: tramlines.block },
        { name: "LEGENDRE", format: `${degree + 1}D`, data: tramlines.legendre, unit: "pixel" },
        { name: "SEEN_FROM", format: "1J", data: tramlines.seenFrom, unit: "pixel" },
        { name: "SEEN_TO", format: "1J", data: tramlines.seenTo, unit: "pixel" },
        { name: "RMS", format: "1D", data: tramlines.rms, unit: "pixel" },
        { name: "NPOINT", format: "1J", data: tramlines.nPoint },
        { name: "ERROR", format: "1D", data: tramlineErrors(tramlines), unit: "pixel" },
      ],
    },
    {
      kind: "table",
      name: "PROFILE",
      cards: [
        { keyword: "PROFKIND", value: profile.kind, comment: "profile model, integrated over pixels" },
        { keyword: "PROFERR", value: profile.relativeError, comment: "its own relative error" },
        { keyword: "DEGREE", value: profile.widthDegree, comment: "of the Legendre series sigma(x)" },
      ],
      columns: [
        { name: "FIBRE", format: "1J", data: tramlines.fibre },
        { name: "SIGMA", format: `${profile.widthDegree + 1}D`, data: profile.sigma, unit: "pixel" },
      ],
    },
    ...(profile.kind === "gaussian" ? [] : shapeHdus(profile)),
  ];
}

function primaryCards(tramlines: Tramlines, options: TramlinesFileOptions): Card[] {
  const own: Card[] = [
    { keyword: "TRAMVERS", value: FORMAT_VERSION, comment: "format of this file" },
    { keyword: "TRAMGEOM", value: tramlines.geometryDigest, comment: "digest of the detector's geometry" },
    { keyword: "TRAMNX", value: tramlines.nx, comment: "columns of the frame, along dispersion" },
    { keyword: "TRAMNY", value: tramlines.ny, comment: "rows of the frame, along the slit" },
  ];
  const taken = new Set(own.map((card) => card.keyword));
  const carried = options.header === undefined ? [] : inputCards(options.header);
  return [
    ...carried.filter((card) => !taken.has(card.keyword)),
    ...own,
    ...historyCards(options.version, options.options, options.inputs),
  ];
}

/** Writes the product whole or not at all.
 * @throws FitsError when `path` exists and `force` is not set, is one of `inputs`, or cannot be written. */
export async function writeTramlines(
  path: string,
  tramlines: Tramlines,
  options: TramlinesFileOptions,
  write: { force?: boolean | undefined; inputs?: string[] | undefined } = {},
): Promise<void> {
  await writeFits(path, tramlinesHdus(tramlines, options), write);
}

/** Reads tramlines back.
 * @throws FitsError when the file holds none, in a newer format, or in a state that cannot be. */
export async function readTramlines(input: string | Uint8Array, name?: string): Promise<Tramlines> {
  const table = await readTable(input, "TRAMLINES", { name });
  const file = typeof input === "string" ? input : (name ?? "the tramlines");
  const primary = table.primaryHeader;
  const version = wholeNumber(primary, "TRAMVERS") ?? 0;
  if (version < 1 || version > FORMAT_VERSION) {
    const finding =
      version < 1 ? "this is no file of tramlines" : `format ${version}, but ${FORMAT_VERSION} is the newest known`;
    throw new FitsError("unsupported", finding, "trace the flat again with this program", { file });
  }
  const profileTable = await readTable(input, "PROFILE", { name });
  const column = columnsOf(table, file);
  const nFibre = table.nRows;
  const coefficients = table.columns.find((c) => c.name === "LEGENDRE");
  const tramlines: Tramlines = {
    nx: wholeNumber(primary, "TRAMNX") ?? 0,
    ny: wholeNumber(primary, "TRAMNY") ?? 0,
    nFibre,
    degree: (coefficients?.repeat ?? 1) - 1,
    fibre: Int32Array.from(column("FIBRE") as ArrayLike<number>),
    state: Array.from(column("STATE") as ArrayLike<string>) as FibreState[],
    block: Int32Array.from(column("BLOCK") as ArrayLike<number>),
    legendre: Float64Array.from(column("LEGENDRE") as ArrayLike<number>),
    seenFrom: Int32Array.from(column("SEEN_FROM") as ArrayLike<number>),
    seenTo: Int32Array.from(column("SEEN_TO") as ArrayLike<number>),
    rms: Float64Array.from(column("RMS") as ArrayLike<number>),
    nPoint: Int32Array.from(column("NPOINT") as ArrayLike<number>),
    profile: await readProfile(input, profileTable, file, name),
    geometryDigest: String(primary.get("TRAMGEOM") ?? ""),
  };
  checkContent(tramlines, file);
  return tramlines;
}

async function readProfile(
  input: string | Uint8Array,
  table: FitsTable,
  file: string,
  name: string | undefined,
): Promise<Profile> {
  const kind = table.header.get("PROFKIND");
  const sigma = table.columns.find((column) => column.name === "SIGMA");
  const common = {
    sigma: Float64Array.from(columnsOf(table, file)("SIGMA") as ArrayLike<number>),
    widthDegree: (sigma?.repeat ?? 1) - 1,
    relativeError: Number(table.header.get("PROFERR") ?? 0),
  };
  if (kind === "gaussian") return { kind, ...common };
  if (kind === "hermite" || kind === "empirical") return { kind, ...common, ...(await readShape(input, name, kind)) };
  const finding = `profile model ${String(kind)}, but only gaussian, hermite and empirical are known`;
  throw new FitsError("unsupported", finding, "trace the flat again with this program", { file });
}

function columnsOf(table: FitsTable, file: string) {
  return (name: string) => {
    const column = table.columns.find((c) => c.name === name);
    if (column === undefined) {
      throw new FitsError("not-found", `there is no column ${name}`, "trace the flat again", {
        file,
        hdu: table.hduIndex,
      });
    }
    return column.data;
  };
}

function checkContent(tramlines: Tramlines, file: string): void {
  const place = { file };
  const strange = tramlines.state.find((state) => !STATES.includes(state));
  if (strange !== undefined) {
    throw new FitsError(
      "data",
      `state ${strange} of a fibre, but lit, dim or dead is expected`,
      "trace the flat again",
      place,
    );
  }
  const { nFibre, profile } = tramlines;
  const misplaced = tramlines.fibre.findIndex((fibre, k) => fibre !== k + 1);
  if (misplaced >= 0) {
    const finding = `row ${misplaced + 1} is fibre ${tramlines.fibre[misplaced]}, but rows must follow the slit from 1`;
    throw new FitsError("data", finding, "trace the flat again", place);
  }
  const finite = tramlines.legendre.every(Number.isFinite) && profile.sigma.every((s) => Number.isFinite(s));
  if (!finite || profile.sigma.length !== nFibre * (profile.widthDegree + 1) || tramlines.nx < 1 || tramlines.ny < 1) {
    throw new FitsError("data", "coefficients or sizes are missing or not finite", "trace the flat again", place);
  }
}

function wholeNumber(header: Header, keyword: string): number | undefined {
  const value = header.get(keyword);
  return typeof value === "number" && Number.isInteger(value) ? value : undefined;
}
