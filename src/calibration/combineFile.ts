/** Combined spectra as a FITS file: the images of a spectra product, in e⁻ per column of the first frame's exposure, and
 *
 *     NFRAMES      16     how many frames count at each point
 *     COLUMN_COV   −32    covariance with the next column, where light was moved between columns
 *     WAVELENGTH, SKY     of the first frame, and the mean sky on its exposure, where the frames have them
 *     FRAMES       table  a row a frame: scale, weight, share rejected, shifts
 *     TARGETS      table  sums over targets' fibres
 *
 * CHI2 is that of the frames about their mean. The header is the first frame's. */
import { spectrumImages } from "../extraction/file.js";
import { medianSignalToNoise } from "../extraction/snr.js";
import type { Target } from "../extraction/targets.js";
import { historyCards, inputCards } from "../fits/carry.js";
import type { OutputHdu, PixelArray } from "../fits/encode.js";
import type { Card } from "../fits/header.js";
import type { CombinedSpectra } from "./combineSpectra.js";
import { type CarriedHistory, mediumCards, summedTargets } from "./rebinFile.js";
import { carriedPositions, type SpectraProduct } from "./spectraProduct.js";

/** All HDUs of the product. `products`: what was combined. `targets`: to be summed; those of the first file unless given. */
export function combinedHdus(
  products: SpectraProduct[],
  combined: CombinedSpectra,
  history: CarriedHistory,
  targets: Target[] = products[0].targets.map(({ target }) => target),
): OutputHdu[] {
  const [first] = products;
  const { spectra, nFrames, sky, columnCovariance } = combined;
  const image = (name: string, unit: string | undefined, data: PixelArray, cards: Card[]): OutputHdu => ({
    ...{ kind: "image", name, unit, data, nx: spectra.nx, ny: spectra.nFibre, cards },
  });
  const optional = (hdu: OutputHdu | undefined) => (hdu === undefined ? [] : [hdu]);
  return [
    { kind: "primary", header: primaryCards(products, combined, history) },
    ...spectrumImages(spectra, [
      comment(`Mean of frames, on the exposure of ${first.name}; CHI2: of frames about it.`),
    ]),
    image("NFRAMES", undefined, nFrames, [comment("Frames that count at each point.")]),
    ...optional(
      columnCovariance &&
        image("COLUMN_COV", "electron2", Float32Array.from(columnCovariance), [
          comment("Covariance of FLUX with that of the next column, from frames whose light was moved (FRAMES)."),
        ]),
    ),
    ...optional(
      first.wavelengths && image("WAVELENGTH", "Angstrom", first.wavelengths.image, mediumCards(first.wavelengths)),
    ),
    ...optional(sky && image("SKY", "electron", Float32Array.from(sky), [comment("Mean sky light taken off.")])),
    {
      kind: "table",
      name: "POSITIONS",
      columns: carriedPositions(
        first,
        ["SHIFT"],
        [{ name: "MEDIAN_SNR", format: "1D", data: medianSignalToNoise(spectra) }],
      ),
    },
    framesHdu(combined),
    ...(targets.length === 0 ? [] : [summedTargets(spectra, targets, first.targets)]),
  ];
}

function framesHdu({ frames }: CombinedSpectra): OutputHdu {
  const numbers = (value: (frame: CombinedSpectra["frames"][number]) => number) => Float64Array.from(frames, value);
  const names = frames.map(({ name }) => name.replace(/[^ -~]/g, "?"));
  return {
    kind: "table",
    name: "FRAMES",
    columns: [
      { name: "NAME", format: `${Math.max(1, ...names.map((name) => name.length))}A`, data: names },
      { name: "EXPTIME", format: "1D", unit: "s", data: numbers(({ exposureSeconds }) => exposureSeconds) },
      { name: "SCALE", format: "1D", data: numbers(({ scale }) => scale) },
      { name: "SCALE_ERR", format: "1D", data: numbers(({ error }) => error) },
      { name: "SCATTER", format: "1D", data: numbers(({ scatter }) => scatter) },
      { name: "WEIGHT", format: "1D", data: numbers(({ weight }) => weight) },
      { name: "REJECTED", format: "1D", data: numbers(({ rejectedShare }) => rejectedShare) },
      { name: "APART", format: "1D", unit: "pixel", data: numbers(({ apart }) => apart) },
      { name: "MOVED", format: "1L", data: frames.map(({ moved }) => moved) },
      { name: "LINE_SHIFT", format: "1D", unit: "pixel", data: numbers(({ lineShift }) => lineShift) },
      { name: "LINE_SHIFT_ERR", format: "1D", unit: "pixel", data: numbers(({ lineShiftError }) => lineShiftError) },
    ],
    cards: [
      comment(
        "SCALE: light against the first frame, SCATTER: of its fibres about that, WEIGHT: share of the information, REJECTED: " +
          "share of its points; APART: largest difference of its wavelengths from the first frame's columns, MOVED: light " +
          "moved to those, LINE_SHIFT: where its lines still lie against the first frame's.",
      ),
    ],
  };
}

function primaryCards(products: SpectraProduct[], { frames }: CombinedSpectra, history: CarriedHistory): Card[] {
  const seconds = frames.reduce((sum, { exposureSeconds }) => sum + exposureSeconds, 0);
  const own: Card[] = [
    { keyword: "NCOMBINE", value: products.length, comment: "frames combined (table FRAMES)" },
    ...(Number.isFinite(seconds)
      ? [{ keyword: "EXPTOTAL", value: seconds, comment: "[s] of all frames; EXPTIME: of the first" }]
      : []),
  ];
  // Of one frame's extraction.
  const taken = new Set([...own.map(({ keyword }) => keyword), "NREJECT", "SHIFTMID", "SHIFTERR", "SHIFTX", "SHIFTY"]);
  const carried = inputCards(products[0].primaryHeader).filter(({ keyword }) => !taken.has(keyword));
  return [...carried, ...own, ...historyCards(history.version, history.options, history.inputs)];
}

function comment(text: string): Card {
  return { keyword: "COMMENT", comment: text.replace(/[^ -~]/g, "?") };
}
