/** Detector calibrations as a FITS file: what a night's bias, dark and pixel flat frames came to, to be read for each of its
 * other frames. All that corrects is kept to the bit; images lie with dispersion along axis 1, as frames do inside.
 *
 *     BIAS BIAS_VAR   DARK DARK_VAR DARK_OWN   RESPONSE RESPONSE_RELVAR RESPONSE_UNUSABLE   BAD_PIXELS     images
 *     AMPLIFIERS a row each   FRAMES what became of each frame   STACKS a row a role   NOTES what was said     tables */
import { historyCards } from "../fits/carry.js";
import type { OutputColumn, OutputHdu, PixelArray } from "../fits/encode.js";
import type { Card } from "../fits/header.js";
import { writeFits } from "../fits/write.js";
import type { BadPixelImage } from "./badpixels.js";
import { badPixelNumbers } from "./badpixels.js";
import type { Calibrations } from "./calibrations.js";
import { DetectorError } from "./detectorError.js";
import type { DetectorGeometry } from "./frame.js";

/** Raised when a reader of the file would have to change. */
export const DETECTOR_FORMAT = 1;

export interface DetectorFileOptions {
  /** The program's version, for HISTORY. */
  version: string;
  /** Options that change numbers, one line each, for HISTORY. */
  options: string[];
  /** Files besides the calibration frames, for HISTORY. */
  inputs?: { name: string; checksum: string }[];
}

/** All HDUs of the product, for `writeFits` or `encodeFits`.
 * @throws DetectorError for calibrations without any frame. */
export function detectorHdus(calibrations: Calibrations, options: DetectorFileOptions): OutputHdu[] {
  const { geometry, bias, dark, response, badPixels } = calibrations;
  if (geometry === undefined) {
    throw new DetectorError("There is no bias, dark or pixel flat frame to make a file of; give one at least.");
  }
  const [nx, ny] = turnedSize(geometry);
  const image = (name: string, data: PixelArray, unit: string | undefined, comment: string): OutputHdu => ({
    ...{ kind: "image", name, nx, ny, data, unit, cards: [{ keyword: "COMMENT", comment }] },
  });
  const hdus: OutputHdu[] = [{ kind: "primary", header: primaryCards(calibrations, geometry, options) }];
  if (bias) {
    hdus.push(
      image("BIAS", bias.mean, "electron", "Bias above the overscan's level; NaN where there is no value."),
      image("BIAS_VAR", bias.variance, "electron2", "Variance of BIAS."),
    );
  }
  if (dark) {
    hdus.push(
      image("DARK", dark.rate, "electron/s", "Dark current."),
      image("DARK_VAR", dark.rateVariance, "electron2 s-2", "Variance of DARK, without the bias frames' share."),
      image("DARK_OWN", dark.own, undefined, "0 where a smooth rate stands in for the pixel's own."),
    );
  }
  if (response) {
    hdus.push(
      image("RESPONSE", response.response, undefined, "Pixel response, 1 in the mean."),
      image("RESPONSE_RELVAR", response.relativeVariance, undefined, "Variance of RESPONSE over its square."),
      image("RESPONSE_UNUSABLE", response.unusable, undefined, "1 where the response is too low, too high or unknown."),
    );
  }
  if (badPixels) hdus.push(badPixelsHdu(badPixels));
  hdus.push(amplifiersHdu(calibrations, geometry), framesHdu(calibrations));
  const stacks = calibrations.stacks ?? [];
  if (stacks.length > 0) {
    hdus.push({
      ...{ kind: "table", name: "STACKS" },
      columns: [
        textColumn(
          "ROLE",
          stacks.map(({ role }) => role),
        ),
        { name: "LEVEL", format: "1D", data: stacks.map(({ level }) => level) },
        { name: "NOISE", format: "1D", data: stacks.map(({ noise }) => noise) },
      ],
    });
  }
  const { assumptions, warnings } = calibrations;
  const notes = [...assumptions.map((text) => ["assumed", text]), ...warnings.map((text) => ["warning", text])];
  if (notes.length > 0) {
    const columns = ["KIND", "TEXT"].map((name, k) =>
      textColumn(
        name,
        notes.map((note) => note[k]),
      ),
    );
    hdus.push({ kind: "table", name: "NOTES", columns });
  }
  return hdus;
}

/** Writes the product whole or not at all.
 * @throws FitsError when `path` exists and `force` is not set, is one of `inputs`, or cannot be written. */
export async function writeDetector(
  path: string,
  calibrations: Calibrations,
  options: DetectorFileOptions,
  write: { force?: boolean | undefined; inputs?: string[] | undefined } = {},
): Promise<void> {
  await writeFits(path, detectorHdus(calibrations, options), write);
}

/** Columns and rows of the frames that the calibrations are for. */
export function turnedSize({ axis1, axis2, dispersionAxis }: DetectorGeometry): [number, number] {
  return dispersionAxis === 1 ? [axis1, axis2] : [axis2, axis1];
}

function primaryCards(made: Calibrations, geometry: DetectorGeometry, options: DetectorFileOptions): Card[] {
  const { digest, axis1, axis2, dispersionAxis, binning } = geometry;
  return [
    { keyword: "DETVERS", value: DETECTOR_FORMAT, comment: "format of this file" },
    { keyword: "DETGEOM", value: digest, comment: "digest of the detector's geometry" },
    { keyword: "DETAXIS1", value: axis1, comment: "size of raw frames without overscan" },
    { keyword: "DETAXIS2", value: axis2, comment: "" },
    { keyword: "DISPAXIS", value: dispersionAxis, comment: "dispersion in raw frames; here it is along axis 1" },
    { keyword: "DETBIN1", value: binning[0], comment: "binning" },
    { keyword: "DETBIN2", value: binning[1], comment: "" },
    { keyword: "FLATTOLD", value: made.toldByPixelFlats ?? "", comment: "what the pixel flats were asked" },
    ...historyCards(options.version, options.options, [...(options.inputs ?? []), ...made.inputs]),
  ];
}

/** As the raw frame lies in its file, unlike the others: that is how such images are given. */
function badPixelsHdu(badPixels: BadPixelImage): OutputHdu {
  const { nx, ny } = badPixels;
  const data = new Uint8Array(nx * ny);
  for (const at of badPixelNumbers(badPixels)) data[at] = 1;
  const comment = "Not 0 where a pixel is bad; as raw frames lie in their files.";
  return { kind: "image", name: "BAD_PIXELS", nx, ny, data, cards: [{ keyword: "COMMENT", comment }] };
}

function amplifiersHdu(made: Calibrations, { data, place }: DetectorGeometry): OutputHdu {
  const n = data.length;
  const numbers = (name: string, values: number[] | undefined, unit?: string): OutputColumn => ({
    ...{ name, format: "1D", unit, data: values ?? new Array(n).fill(Number.NaN) },
  });
  return {
    ...{ kind: "table", name: "AMPLIFIERS" },
    columns: [
      textColumn("DATA", data),
      textColumn("PLACE", place),
      numbers("GAIN", made.gains),
      numbers("ZERO_LEVEL", made.zeroLevelAdu, "adu"),
      numbers("DARK_TYPICAL", made.dark?.typicalRate, "electron/s"),
      numbers("BIAS_PER_SECOND", made.dark && new Array(n).fill(made.dark.biasPerSecond)),
      numbers("RESPONSE_SCATTER", made.response?.scatter),
    ],
    cards: [{ keyword: "GEOMOF", value: plain(made.geometryOf ?? ""), comment: "a frame of that readout" }],
  };
}

function framesHdu({ stacks = [], inputs, badPixels }: Calibrations): OutputHdu {
  const known = stacks.flatMap(({ role, frames }) => frames.map((frame) => ({ ...frame, role: role as string })));
  const nothing = { used: true, level: Number.NaN, noise: Number.NaN, clippedShare: Number.NaN };
  const others = inputs.filter(({ role }) => known.length === 0 || role === "bad pixels");
  const rows = [...known, ...others.map((input) => ({ ...input, ...nothing, reason: undefined }))];
  if (badPixels && !inputs.some(({ role }) => role === "bad pixels")) {
    rows.push({ name: badPixels.name, checksum: "", role: "bad pixels", ...nothing, reason: undefined });
  }
  const text = (name: string, of: (row: (typeof rows)[0]) => string) => textColumn(name, rows.map(of));
  const numbers = (name: string, of: (row: (typeof rows)[0]) => number, unit?: string): OutputColumn => ({
    ...{ name, format: "1D", unit, data: rows.map(of) },
  });
  return {
    ...{ kind: "table", name: "FRAMES" },
    columns: [
      text("ROLE", ({ role }) => role),
      text("NAME", ({ name }) => name),
      text("CHECKSUM", ({ checksum }) => checksum),
      { name: "USED", format: "1L", data: rows.map(({ used }) => used) },
      numbers("LEVEL", ({ level }) => level, "electron"),
      numbers("NOISE", ({ noise }) => noise, "electron"),
      numbers("CLIPPED", ({ clippedShare }) => clippedShare),
      text("REASON", ({ reason }) => reason ?? ""),
    ],
  };
}

/** Fixed width, as FITS tables want it. */
function textColumn(name: string, texts: string[]): OutputColumn {
  const data = texts.map(plain);
  return { name, format: `${Math.max(1, ...data.map((text) => text.length))}A`, data };
}

/** FITS holds ASCII only: other characters are written as \uXXXX. */
function plain(text: string): string {
  return text.replace(/[^ -[\]-~]/g, (letter) => `\\u${letter.charCodeAt(0).toString(16).padStart(4, "0")}`);
}

/** The text again. */
export function unescaped(text: string): string {
  return text.replace(/\\u([0-9a-f]{4})/g, (_, code: string) => String.fromCharCode(Number.parseInt(code, 16)));
}
