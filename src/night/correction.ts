/** What a thread keeps between jobs: calibrations and tramlines, by the sums of the files that they come from. */
import { basename } from "node:path";
import type { Calibrations } from "../detector/calibrations.js";
import { loadCalibrations } from "../detector/loadCalibrations.js";
import { readSpectrograph, type Spectrograph } from "../spectrograph.js";
import { readTramlines } from "../tramlines/file.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import type { Job } from "./task.js";

/** What raw frames are corrected with. `inputs`: for HISTORY, added to by whoever reads more. */
export interface Correction {
  spectrograph: Spectrograph | undefined;
  calibrations: Calibrations;
  inputs: { name: string; checksum: string }[];
  hdu?: number | undefined;
}

/** Of the last job that asked. */
const kept = new Map<string, { key: string; value: Promise<unknown> }>();

/** `load`'s result, kept under `name` until another `key` is asked for. */
function keep<T>(name: string, key: string, load: () => Promise<T>): Promise<T> {
  const held = kept.get(name);
  if (held?.key === key) return held.value as Promise<T>;
  const value = load();
  kept.set(name, { key, value });
  return value;
}

/** @throws what reading and combining the calibration frames throw. */
export async function openCorrection({ inputs, options }: Job): Promise<Correction> {
  const hdu = (options as { hdu: number | null }).hdu ?? undefined;
  const [file] = inputs.spectrograph ?? [];
  const spectrograph =
    file === undefined ? undefined : await keep("spectrograph", file.digest, () => readSpectrograph(file.path));
  const { bias, dark, pixelFlat, badPixels } = inputs;
  const lists = { bias, dark, pixelFlat, badPixels };
  const given = Object.entries(lists).flatMap(([role, files]) => (files === undefined ? [] : [[role, files] as const]));
  const key = JSON.stringify([given, file?.digest, hdu]);
  const calibrations = await keep("calibrations", key, () => {
    const paths = given.map(([role, files]) => [role, role === "badPixels" ? files[0].path : files.map((f) => f.path)]);
    return loadCalibrations({ ...Object.fromEntries(paths), ...(hdu === undefined ? {} : { hdu }) }, spectrograph);
  });
  return { spectrograph, calibrations, inputs: [...fileInputs(file), ...calibrations.inputs], hdu };
}

/** The night's tramlines, counted among the correction's inputs. */
export async function openTramlines({ from }: Job, correction: Correction): Promise<Tramlines> {
  const file = from["tramlines.fits"];
  correction.inputs.push(...fileInputs(file));
  return keep("tramlines", file.digest, () => readTramlines(file.path));
}

/** A file that is no image: its name and the first 16 digits of the SHA-256 of its bytes. */
function fileInputs(file: { path: string; digest: string } | undefined): { name: string; checksum: string }[] {
  return file === undefined ? [] : [{ name: basename(file.path), checksum: file.digest.slice(0, 16) }];
}

/** The files that a frame is corrected with, as lines for HISTORY. */
export function correctionLines({ inputs, options }: Job): string[] {
  const roles = {
    spectrograph: "spectrograph",
    bias: "bias",
    dark: "dark",
    pixelFlat: "pixel-flat",
    badPixels: "bad-pixels",
  };
  const lines = Object.entries(roles).flatMap(([role, word]) =>
    (inputs[role] ?? []).map(({ path }) => `${word} ${basename(path)}`),
  );
  const { hdu } = options as { hdu: number | null };
  return hdu === null ? lines : [...lines, `hdu ${hdu}`];
}
