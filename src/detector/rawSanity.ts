/** Is this a raw frame at all? Checks before any arithmetic: levels that no converter writes, and frames that were
 * reduced already. */
import { census as censusByKernel } from "../kernels/census.js";
import { census } from "../reference/census.js";
import type { Spectrograph } from "../spectrograph.js";
import { DetectorError } from "./detectorError.js";
import { cardOf, type RawImage, textOf } from "./raw.js";

/** @throws DetectorError when BZERO was lost, or the frame is in electrons or already corrected, unless the
 * spectrograph file gives gains (of 1) and bias levels and so vouches for it. */
export function refuseImpossible(raw: RawImage, spectrograph?: Spectrograph): void {
  const { data, memory } = raw;
  const { nNegative, nFinite, nFraction, lowest, highest } =
    memory && data instanceof Float32Array ? censusByKernel(memory, data) : census(data);
  if (nFinite === 0) {
    throw new DetectorError(`${raw.name}: no pixel has a value (all are NaN or blank); take or copy the frame again.`);
  }
  const integers = nFraction === 0;
  if (integers && lowest < -1000 && 2 * nNegative > nFinite) {
    throw new DetectorError(
      `${raw.name}: levels from ${lowest} to ${highest} ADU, but a detector's counts are not negative; a BZERO of 32768 seems to be lost, restore it in the header.`,
    );
  }
  const vouched = spectrograph?.detector.amplifiers.some((entry) => entry.gain !== undefined) ?? false;
  const unit = textOf(raw, ["BUNIT"])?.value ?? raw.unit ?? "";
  if (/electron|^e-?(\/s)?$|erg|jy/i.test(unit) && !vouched) {
    throw new DetectorError(
      `${raw.name}: its unit is '${unit}', so it was reduced already, but raw counts (ADU) were expected; give the raw frame, or say gain = 1 for its amplifiers in the spectrograph file.`,
    );
  }
  const hasOverscan =
    cardOf(raw, ["BIASSEC", "BIASSEC1", "OVERSEC", "OVERSEC1"]) !== undefined ||
    (spectrograph?.detector.amplifiers.some((entry) => entry.overscan !== undefined) ?? false);
  const hasLevel = spectrograph?.detector.amplifiers.some((entry) => entry.biasLevelAdu !== undefined) ?? false;
  if (!hasOverscan && !hasLevel && 100 * nNegative > nFinite) {
    throw new DetectorError(
      `${raw.name}: ${percent(nNegative / nFinite)} of its pixels are negative (down to ${lowest.toPrecision(4)}) and it has no overscan, so its zero level was taken off already; give the raw frame, or say bias_level = 0 in the spectrograph file.`,
    );
  }
}

export function percent(share: number): string {
  return `${Number((100 * share).toPrecision(2))} %`;
}
