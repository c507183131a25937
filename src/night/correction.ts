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
export async function openCorrection(job: Job): Promise<Correction> {
  const { inputs, from, options } = job;
  const hdu = (options as { hdu: number | null }).hdu ?? undefined;
  const [file] = inputs.spectrograph ?? [];
  const spectrograph = await openSpectrograph(job);
  const detector = from["detector.fits"];
  const { bias, dark, pixelFlat, badPixels } = inputs;
  const lists = { detector: detector && [detector], bias, dark, pixelFlat, badPixels };
  const given = Object.entries(lists).flatMap(([role, files]) => (files === undefined ? [] : [[role, files] as const]));
  const key = JSON.stringify([given, file?.digest, hdu]);
  const calibrations = await keep("calibrations", key, () => {
    const alone = (role: string) => role === "badPixels" || role === "detector";
    const paths = given.map(([role, files]) => [role, alone(role) ? files[0].path : files.map((f) => f.path)]);
    return loadCalibrations({ ...Object.fromEntries(paths), ...(hdu === undefined ? {} : { hdu }) }, spectrograph);
  });
  return { spectrograph, calibrations, inputs: [...fileInputs(file), ...calibrations.inputs], hdu };
}

/** What the spectrograph file says. */
export async function openSpectrograph({ inputs }: Job): Promise<Spectrograph | undefined> {
  const [file] = inputs.spectrograph ?? [];
  return file === undefined ? undefined : keep("spectrograph", file.digest, () => readSpectrograph(file.path));
}

/** A product that several frames need. */
export function openProduct<T>({ from }: Job, name: string, read: (path: string) => Promise<T>): Promise<T> {
  const { path, digest } = from[name];
  return keep(name, digest, () => read(path));
}

/** The night's tramlines, counted among the correction's inputs. */
export async function openTramlines(job: Job, correction: Pick<Correction, "inputs">): Promise<Tramlines> {
  correction.inputs.push(...fileInputs(job.from["tramlines.fits"]));
  return openProduct(job, "tramlines.fits", readTramlines);
}

/** A file that is no image: its name and the first 16 digits of the SHA-256 of its bytes. */
export function fileInputs(file: { path: string; digest: string } | undefined): { name: string; checksum: string }[] {
  return file === undefined ? [] : [{ name: basename(file.path), checksum: file.digest.slice(0, 16) }];
}

/** The files that a frame is corrected with, as lines for HISTORY. */
export function correctionLines({ inputs, from, options }: Job): string[] {
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
  if (from["detector.fits"] !== undefined) lines.push("detector detector.fits");
  const { hdu } = options as { hdu: number | null };
  return hdu === null ? lines : [...lines, `hdu ${hdu}`];
}
