/** Calibration frames from files. */
import { statSync } from "node:fs";
import { type FitsImage, readImage } from "../fits/image.js";
import { readMask } from "../fits/mask.js";
import type { Spectrograph } from "../spectrograph.js";
import { type CalibrationFrames, type Calibrations, makeCalibrations } from "./calibrations.js";
import { readDetector } from "./readDetector.js";

export interface CalibrationPaths {
  /** A file of calibrations made before (`writeDetector`), in place of all the others. */
  detector?: string;
  bias?: string[];
  dark?: string[];
  pixelFlat?: string[];
  /** Wins over the spectrograph file's bad_pixels. */
  badPixels?: string;
  /** Which HDU of the raw frames holds the image, from 0; by default the first that has one. */
  hdu?: number;
}

/** Reads and combines the calibration frames, one raw frame in memory at a time; more than seven of a role are read twice.
 * @throws FitsError for files that cannot be read, DetectorError for frames that cannot serve. */
export async function loadCalibrations(paths: CalibrationPaths, spectrograph?: Spectrograph): Promise<Calibrations> {
  if (paths.detector !== undefined) return withBadPixels(await readDetector(paths.detector), spectrograph);
  const frames: CalibrationFrames = {};
  for (const role of ["bias", "dark", "pixelFlat"] as const) {
    const files = paths[role] ?? [];
    if (files.length > 0) frames[role] = imageFiles(files, paths.hdu);
  }
  const bad = paths.badPixels ?? spectrograph?.detector.badPixels;
  if (bad !== undefined) frames.badPixels = await readMask(bad);
  return makeCalibrations(frames, spectrograph);
}

/** A file that holds no bad pixels leaves those of the spectrograph file. */
async function withBadPixels(made: Calibrations, spectrograph: Spectrograph | undefined): Promise<Calibrations> {
  const bad = spectrograph?.detector.badPixels;
  if (made.badPixels !== undefined || bad === undefined) return made;
  const badPixels = await readMask(bad);
  const { name, checksum } = badPixels;
  return { ...made, badPixels, inputs: [...made.inputs, { role: "bad pixels", name, checksum }] };
}

/** Files as frames that can be read again. What is no plain file (a pipe, standard input) gives its bytes once, and is kept.
 * `forFrame`: as for `readImage`. */
export function imageFiles(files: string[], hdu: number | undefined) {
  const once = new Map<string, Promise<FitsImage>>();
  return {
    length: files.length,
    read: (index: number, forFrame = false): Promise<FitsImage> => {
      const file = files[index];
      const options = { forFrame, ...(hdu === undefined ? {} : { hdu }) };
      if (file !== "-" && (statSync(file, { throwIfNoEntry: false })?.isFile() ?? true))
        return readImage(file, options);
      const kept = once.get(file) ?? readImage(file, { ...options, forFrame: false });
      once.set(file, kept);
      return kept;
    },
  };
}
