/** Spectra as a FITS file: one image HDU a quantity (NAXIS1 = dispersion pixel, NAXIS2 = slit position) and the table
 * POSITIONS, a row a slit position. */
import type { Frame } from "../detector/frame.js";
import { historyCards, inputCards } from "../fits/carry.js";
import type { OutputColumn, OutputHdu, PixelArray } from "../fits/encode.js";
import { FitsError } from "../fits/errors.js";
import type { Card } from "../fits/header.js";
import { readImage } from "../fits/image.js";
import { readTable } from "../fits/table.js";
import { writeFits } from "../fits/write.js";
import { legendreValue } from "../reference/legendre.js";
import { type Shift, shiftAt } from "../tramlines/shift.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import type { Extraction } from "./extract.js";
import { medianSignalToNoise } from "./snr.js";
import type { Method, Spectra } from "./spectra.js";

/** Raised when a reader of the file would have to change. */
const formatVersion = 1;

export interface SpectraFileOptions {
  /** The program's version, for HISTORY. */
  version: string;
  /** Options that change numbers, one line each, for HISTORY. */
  options: string[];
  /** Files that the spectra were made from, for HISTORY. */
  inputs: { name: string; checksum: string }[];
  /** Slit positions, from 1, whose fibres see sky only. */
  sky?: number[] | undefined;
  /** What `medianSignalToNoise` says of the spectra, where that is known already. */
  signalToNoise?: Float64Array | undefined;
  /** HDUs that follow the spectra (extraHdus.ts). */
  extra?: OutputHdu[] | undefined;
  /** Of calibrated spectra: cards for the primary header, and each fibre's throughput [nFibre]. */
  calibration?: { cards: Card[]; throughput: ArrayLike<number> | null } | undefined;
}

/** All HDUs of the product, for `writeFits` or `encodeFits`. */
export function spectraHdus(
  extraction: Extraction,
  frame: Frame,
  tramlines: Tramlines,
  options: SpectraFileOptions,
): OutputHdu[] {
  const { spectra } = extraction;
  return [
    { kind: "primary", header: primaryCards(extraction, frame, tramlines, options) },
    ...spectrumImages(spectra),
    { kind: "table", name: "POSITIONS", columns: positionColumns(extraction, tramlines, options) },
    ...(options.extra ?? []),
  ];
}

/** The images of spectra, as every product that holds some has them. `cards`: added to each, of its coordinates. */
export function spectrumImages(spectra: Spectra, cards: Card[] = []): OutputHdu[] {
  const image = (name: string, unit: string | undefined, data: PixelArray, comment: string): OutputHdu => ({
    kind: "image",
    name,
    nx: spectra.nx,
    ny: spectra.nFibre,
    data,
    unit,
    cards: [...cards, { keyword: "COMMENT", comment }],
  });
  return [
    image("FLUX", "electron", single(spectra.flux), "Light of the fibre in that column; NaN where there is no value."),
    image("FLUX_VAR", "electron2", single(spectra.variance), "Variance of FLUX."),
    image(
      "NEIGHBOUR_COV",
      "electron2",
      single(spectra.neighbourCovariance),
      "Covariance of FLUX with that of the next slit position.",
    ),
    image("FLAGS", undefined, spectra.flags, flagsComment),
    image("CHI2", undefined, single(spectra.chi2), "Reduced chi-square of the profile fit in the fibre's window."),
    image("BACKGROUND", "electron", single(spectra.background), "Scattered light under the fibre, per pixel."),
  ];
}

/** Writes the product whole or not at all.
 * @throws FitsError when `path` exists and `force` is not set, is one of `inputs`, or cannot be written. */
export async function writeSpectra(
  path: string,
  extraction: Extraction,
  frame: Frame,
  tramlines: Tramlines,
  options: SpectraFileOptions,
  write: { force?: boolean; inputs?: string[] } = {},
): Promise<void> {
  await writeFits(path, spectraHdus(extraction, frame, tramlines, options), write);
}

/** Reads spectra back. `input`: as for `readImage`; `name`: what to call bytes in messages.
 * @throws FitsError when an HDU of the product is missing or its format is newer than this program. */
export async function readSpectra(input: string | Uint8Array, name?: string): Promise<Spectra> {
  const flux = await readImage(input, { hdu: "FLUX", name });
  const version = flux.primaryHeader.integer("SPECVERS") ?? 0;
  if (version < 1 || version > formatVersion) {
    const finding =
      version < 1 ? "this is no file of extracted spectra" : `format version ${version} is newer than ${formatVersion}`;
    throw new FitsError("unsupported", finding, "extract the frame again with this program", {
      file: typeof input === "string" ? input : name,
    });
  }
  const numbers = async (hdu: string) => Float32Array.from((await readImage(input, { hdu, name })).data);
  const flags = await readImage(input, { hdu: "FLAGS", name });
  return {
    nFibre: flux.ny,
    nx: flux.nx,
    method: flux.primaryHeader.text("EXMETHOD") as Method,
    crosstalkCorrected: flux.primaryHeader.logical("XTALKCOR") ?? false,
    flux: Float32Array.from(flux.data),
    variance: await numbers("FLUX_VAR"),
    neighbourCovariance: await numbers("NEIGHBOUR_COV"),
    flags: Int32Array.from(flags.data),
    chi2: await numbers("CHI2"),
    background: await numbers("BACKGROUND"),
  };
}

/** Roles and states of the slit positions of a product, a row each. */
export async function readPositions(path: string): Promise<{ fibre: Int32Array; state: string[]; role: string[] }> {
  const table = await readTable(path, "POSITIONS", { columns: ["FIBRE", "STATE", "ROLE"] });
  const [fibre, state, role] = table.columns.map((column) => column.data);
  return { fibre: fibre as Int32Array, state: state as string[], role: role as string[] };
}

const flagsComment =
  "Bits: 1 cosmic ray rejected, 2 bad pixel, 4 neighbour saturated, 8 tramline extrapolated, 16 variance not settled; " +
  "not to be trusted: 256 saturated, 512 over half of the profile lost, 1024 dead or unlit, 2048 outside the detector, " +
  "4096 no wavelength.";

function primaryCards(extraction: Extraction, frame: Frame, tramlines: Tramlines, options: SpectraFileOptions): Card[] {
  const { spectra, background } = extraction;
  const own: Card[] = [
    { keyword: "SPECVERS", value: formatVersion, comment: "format of this file" },
    { keyword: "EXMETHOD", value: spectra.method, comment: "joint, optimal or boxcar" },
    { keyword: "XTALKCOR", value: spectra.crosstalkCorrected, comment: "neighbours' light given back" },
    { keyword: "TRAMGEOM", value: tramlines.geometryDigest, comment: "digest of the detector's geometry" },
    { keyword: "NREJECT", value: extraction.nRejected, comment: "pixels rejected as cosmic rays" },
    { keyword: "PROFERR", value: extraction.profileError, comment: "share of light nearby missed by profiles" },
  ];
  if (background !== null && Number.isFinite(background.error)) {
    own.push({ keyword: "BGERR", value: background.error, comment: "[electron] standard error of the background" });
  }
  if (extraction.shift !== null) {
    const [middle, alongX, alongY] = extraction.shift.coefficients;
    own.push(
      { keyword: "SHIFTMID", value: middle, comment: "[pixel] of the light against the tramlines, middle" },
      { keyword: "SHIFTERR", value: extraction.shift.errors[0], comment: "[pixel] its standard error" },
      { keyword: "SHIFTX", value: alongX, comment: "[pixel] more at the last column" },
      { keyword: "SHIFTY", value: alongY, comment: "[pixel] more at the last row" },
    );
  }
  own.push(...(options.calibration?.cards ?? []));
  const taken = new Set(own.map((card) => card.keyword));
  const carried = inputCards(frame.header).filter((card) => !taken.has(card.keyword));
  return [...carried, ...own, ...historyCards(options.version, options.options, options.inputs)];
}

function positionColumns(
  { spectra, shift }: Extraction,
  tramlines: Tramlines,
  { sky, calibration, signalToNoise = medianSignalToNoise(spectra) }: SpectraFileOptions,
): OutputColumn[] {
  const isSky = new Set(sky ?? []);
  const throughput = calibration?.throughput ?? new Float64Array(spectra.nFibre).fill(Number.NaN);
  const role = Array.from(tramlines.fibre, (fibre, k) =>
    tramlines.state[k] === "dead" ? "spare" : isSky.has(fibre) ? "sky" : "target",
  );
  return [
    { name: "FIBRE", format: "1J", data: tramlines.fibre },
    { name: "STATE", format: "8A", data: tramlines.state },
    { name: "BLOCK", format: "1J", data: tramlines.block },
    { name: "ROLE", format: "8A", data: role },
    { name: "THROUGHPUT", format: "1D", data: throughput },
    { name: "MEDIAN_SNR", format: "1D", data: signalToNoise },
    { name: "SHIFT", format: "1D", unit: "pixel", data: shiftsApplied(shift, tramlines) },
  ];
}

/** Where each fibre was extracted against its tramline, at the middle column: [nFibre] pixels, 0 when nothing was applied. */
function shiftsApplied(shift: Shift | null, tramlines: Tramlines): Float64Array {
  const { nFibre, nx, ny, degree, legendre } = tramlines;
  const nCoef = degree + 1;
  return Float64Array.from({ length: nFibre }, (_, k) => {
    const y = legendreValue(legendre, 0, k * nCoef, nCoef);
    return shift === null ? 0 : shiftAt(shift, (nx - 1) / 2, y, nx, ny);
  });
}

function single(image: Float32Array | Float64Array): Float32Array {
  return image instanceof Float32Array ? image : Float32Array.from(image);
}
