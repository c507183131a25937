/** What fibre flats say of the detector, beside where the fibres run: gain, from the first two, and steps at the seams
 * between amplifiers, from the first. What pixel flats have told already is not told again. */
import type { Spectrograph } from "../spectrograph.js";
import { detectorLayout } from "./amplifiers.js";
import { regionsOf } from "./assemble.js";
import type { Calibrations } from "./calibrations.js";
import type { Frame } from "./frame.js";
import type { NoiseFrames } from "./noise.js";
import { noiseWarnings } from "./noiseWarnings.js";
import type { RawImage } from "./raw.js";
import { seamWarnings } from "./seams.js";

/** One sentence for each gain that is off by over 10 %, and for each step of over 1 % at a seam.
 * @param raws the raw frames of the first flats, in order, two at least where there are two.
 * @param frames the flats, corrected. */
export function flatWarnings(
  raws: RawImage[],
  frames: Frame[],
  calibrations: Calibrations,
  spectrograph?: Spectrograph,
): string[] {
  if (raws.length === 0 || calibrations.toldByPixelFlats === "gains and seams") return [];
  const regions = regionsOf(detectorLayout(raws[0], spectrograph));
  const seams = calibrations.toldByPixelFlats ? [] : seamWarnings({ ...frames[0], regions }, false);
  const flats: NoiseFrames = { flats: raws };
  if (calibrations.zeroLevelAdu) flats.zeroLevelAdu = calibrations.zeroLevelAdu;
  return [...noiseWarnings(flats, spectrograph), ...seams];
}
