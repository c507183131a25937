/** Rebinned spectra as a FITS file: the images of a spectra product on the common grid, whose header cards give every
 * column's wavelength (fits/spectralWcs.ts), and
 *
 *     BIN_COV      −32, electron2   covariance of a bin with the next one of the same fibre
 *     WAVELENGTH   −64, Angstrom    the same in every row, for readers that look there
 *     SKY, TARGETS                  where the spectra had them; targets are summed anew, at equal wavelengths */
import { targetsHdu } from "../extraction/extraHdus.js";
import { spectrumImages } from "../extraction/file.js";
import { medianSignalToNoise } from "../extraction/snr.js";
import { sumFibres, type Target } from "../extraction/targets.js";
import { historyCards, inputCards } from "../fits/carry.js";
import type { OutputHdu } from "../fits/encode.js";
import type { Card } from "../fits/header.js";
import { spectralCards } from "../fits/spectralWcs.js";
import type { SpectralGrid } from "./grid.js";
import { binWavelengths, type RebinnedSpectra } from "./rebin.js";
import { carriedPositions, type SpectraProduct } from "./spectraProduct.js";

export interface CarriedHistory {
  version: string;
  /** One line each. */
  options: string[];
  inputs: { name: string; checksum: string }[];
}

/** All HDUs of the product. `input`: what was rebinned. */
export function rebinnedHdus(input: SpectraProduct, rebinned: RebinnedSpectra, history: CarriedHistory): OutputHdu[] {
  const { spectra, grid, binCovariance, sky } = rebinned;
  const shape = { nx: grid.n, ny: spectra.nFibre };
  const coordinates = spectralCards(grid.medium, grid.kind === "log", grid.start, grid.step);
  const image = (name: string, unit: string, data: Float32Array | Float64Array, more: Card[]): OutputHdu => ({
    ...{ kind: "image", name, unit, data, ...shape },
    cards: [...coordinates, ...more],
  });
  const snr = medianSignalToNoise(spectra);
  const targets = input.targets.map(({ target }) => target);
  return [
    { kind: "primary", header: primaryCards(input, rebinned, history) },
    ...spectrumImages(spectra, coordinates),
    image("BIN_COV", "electron2", Float32Array.from(binCovariance), [
      ...(Number.isFinite(rebinned.neglected) ? [restCard(rebinned.neglected)] : []),
      comment(
        "Covariance of a bin with the next one; COVREST: median of what covariances with bins further off would add to the " +
          "variance of a sum over many bins, over the variance of one.",
      ),
    ]),
    image("WAVELENGTH", "Angstrom", binWavelengths(grid, spectra.nFibre).image, mediumCards(grid)),
    ...(sky === undefined
      ? []
      : [image("SKY", "electron", Float32Array.from(sky), [comment("Sky light taken off, rebinned as FLUX was.")])]),
    {
      kind: "table",
      name: "POSITIONS",
      columns: carriedPositions(input, [], [{ name: "MEDIAN_SNR", format: "1D", data: snr }]),
    },
    ...(targets.length === 0 ? [] : [summedTargets(spectra, targets, input.targets)]),
  ];
}

/** Targets' sums; what was neglected of their variance is as it was. */
export function summedTargets(
  spectra: RebinnedSpectra["spectra"],
  targets: Target[],
  known: SpectraProduct["targets"],
): OutputHdu {
  const neglected = (target: Target) =>
    known.find((one) => one.target.name === target.name && String(one.target.fibres) === String(target.fibres))
      ?.neglected;
  return targetsHdu(
    sumFibres(spectra, targets),
    Float64Array.from(targets, (target) => neglected(target) ?? Number.NaN),
  );
}

export function mediumCards({ medium }: Pick<SpectralGrid, "medium">): Card[] {
  return [{ keyword: "MEDIUM", value: medium, comment: "that wavelengths hold in" }];
}

function primaryCards(input: SpectraProduct, { grid }: RebinnedSpectra, history: CarriedHistory): Card[] {
  const own: Card[] = [
    { keyword: "REBINGRD", value: grid.kind, comment: "grid: linear or log" },
    {
      keyword: "REBINSTP",
      value: grid.step,
      comment: grid.kind === "log" ? "step in ln of wavelength" : "[Angstrom] step",
    },
  ];
  const taken = new Set(own.map((card) => card.keyword));
  const carried = inputCards(input.primaryHeader).filter((card) => !taken.has(card.keyword));
  return [...carried, ...own, ...historyCards(history.version, history.options, history.inputs)];
}

function restCard(value: number): Card {
  return { keyword: "COVREST", value, comment: "share of a wide sum's variance from bins beyond" };
}

function comment(text: string): Card {
  return { keyword: "COMMENT", comment: text };
}
