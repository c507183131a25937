/** Calibration frames from files. */
import { readImage } from "../fits/image.js";
import { readMask } from "../fits/mask.js";
import type { Spectrograph } from "../spectrograph.js";
import { type CalibrationFrames, type Calibrations, makeCalibrations } from "./calibrations.js";
import type { RawImage } from "./raw.js";

export interface CalibrationPaths {
  bias?: string[];
  dark?: string[];
  pixelFlat?: string[];
  /** Wins over the spectrograph file's bad_pixels. */
  badPixels?: string;
  /** Which HDU of the raw frames holds the image, from 0; by default the first that has one. */
  hdu?: number;
}

/** Reads and combines the calibration frames, one raw frame in memory at a time.
 * @throws FitsError for files that cannot be read, DetectorError for frames that cannot serve. */
export async function loadCalibrations(paths: CalibrationPaths, spectrograph?: Spectrograph): Promise<Calibrations> {
  const frames: CalibrationFrames = {};
  for (const role of ["bias", "dark", "pixelFlat"] as const) {
    const files = paths[role] ?? [];
    if (files.length > 0) frames[role] = readEach(files, paths.hdu);
  }
  const bad = paths.badPixels ?? spectrograph?.detector.badPixels;
  if (bad !== undefined) frames.badPixels = await readMask(bad);
  return makeCalibrations(frames, spectrograph);
}

async function* readEach(files: string[], hdu: number | undefined): AsyncGenerator<RawImage> {
  for (const file of files) yield await readImage(file, hdu === undefined ? {} : { hdu });
}
