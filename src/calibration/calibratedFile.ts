/** Extracted spectra calibrated afterwards, from the product that extraction wrote: all that it holds, with the images and
 * columns that calibration changes in their place, and what it adds behind them. */
import { spectrumImages } from "../extraction/file.js";
import { medianSignalToNoise } from "../extraction/snr.js";
import { historyCards, inputCards } from "../fits/carry.js";
import type { OutputHdu } from "../fits/encode.js";
import type { Calibrated } from "./calibrate.js";
import { calibratedHdus, calibrationCards } from "./calibratedHdus.js";
import { type CarriedHistory, summedTargets } from "./rebinFile.js";
import { carriedPositions, type SpectraProduct } from "./spectraProduct.js";
import { fibreLevels } from "./throughputFile.js";

/** All HDUs of the calibrated product. `input`: what was calibrated. */
export function calibratedProductHdus(
  input: SpectraProduct,
  calibrated: Calibrated,
  history: CarriedHistory,
): OutputHdu[] {
  const { spectra, throughput } = calibrated;
  const own = calibrationCards(calibrated);
  const taken = new Set(own.map(({ keyword }) => keyword));
  const carried = inputCards(input.primaryHeader).filter(({ keyword }) => !taken.has(keyword));
  const targets = input.targets.map(({ target }) => target);
  const replaced = [
    { name: "MEDIAN_SNR", format: "1D", data: medianSignalToNoise(spectra) },
    ...(throughput === null ? [] : [{ name: "THROUGHPUT", format: "1D", data: fibreLevels(throughput) }]),
  ];
  return [
    {
      kind: "primary",
      header: [...carried, ...own, ...historyCards(history.version, history.options, history.inputs)],
    },
    ...spectrumImages(spectra),
    { kind: "table", name: "POSITIONS", columns: carriedPositions(input, [], replaced) },
    ...calibratedHdus(calibrated),
    ...(targets.length === 0 ? [] : [summedTargets(spectra, targets, input.targets)]),
  ];
}
