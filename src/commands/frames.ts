/** From file names on the command line to frames and tramlines. */
import { createHash } from "node:crypto";
import { existsSync, readFileSync, statSync } from "node:fs";
import { basename } from "node:path";
import type { Calibrations } from "../detector/calibrations.js";
import { correctFrame } from "../detector/correct.js";
import type { Frame } from "../detector/frame.js";
import { loadCalibrations } from "../detector/loadCalibrations.js";
import type { RawImage } from "../detector/raw.js";
import type { Role } from "../detector/roles.js";
import { type ExtractionPlan, planExtraction } from "../extraction/plan.js";
import { FitsError } from "../fits/errors.js";
import type { Header } from "../fits/header.js";
import { readImage } from "../fits/image.js";
import { readSpectrograph, type Spectrograph } from "../spectrograph.js";
import { checkGeometry, readTramlines } from "../tramlines/file.js";
import { type ProfiledTracing, traceFlatFiles } from "../tramlines/flatFiles.js";
import type { ProfileKind } from "../tramlines/profiles.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { RefusalError } from "./failures.js";
import { type FrameOptions, requireOneDetector, type TramlineOptions } from "./frameOptions.js";
import type { Progress } from "./progress.js";
import { UsageError } from "./usage.js";

export { oneOfEach } from "../oneOfEach.js";
export type { ProfiledTracing } from "../tramlines/flatFiles.js";

/** All that goes into a job. */
export interface Bench {
  options: FrameOptions;
  spectrograph: Spectrograph | undefined;
  calibrations: Calibrations;
  /** Every file that is read, for HISTORY. */
  inputs: { name: string; checksum: string }[];
}

/** The tramlines of a job; `tracing` when they were traced on the way. */
export interface Traced {
  tramlines: Tramlines;
  tracing?: ProfiledTracing;
  /** The first flat's. */
  header?: Header;
  assumptions: string[];
  warnings: string[];
}

/** Tramlines that a frame can be extracted with. */
export interface TracedFor extends Traced {
  plan: ExtractionPlan;
}

/** Every file named on the command line: none of them may be written on. `frames`: those without an option. */
export function inputPaths(frames: string[], options: FrameOptions & TramlineOptions): string[] {
  requireOneDetector(options);
  const { spectrograph, detector, bias, dark, pixelFlat, badPixels, flat, tramlines } = options;
  const corrections = [spectrograph, detector, bias, dark, pixelFlat, badPixels];
  const lists = [frames, flat, tramlines, ...corrections].flatMap((one) => one ?? []);
  const paths = lists.filter((path) => path !== "-");
  if (lists.length - paths.length > 1) {
    throw new UsageError("hatchel: - stands for several files, but standard input holds one; name the others.");
  }
  return paths;
}

/** Reads spectrograph file and calibration frames. A name without a file is refused before anything is read. */
export async function openBench(paths: string[], options: FrameOptions, progress: Progress): Promise<Bench> {
  const missing = paths.find((path) => !existsSync(path));
  if (missing !== undefined) {
    throw new FitsError("unreadable", "there is no such file", "check the name", { file: missing });
  }
  const { spectrograph: file, detector, bias, dark, pixelFlat, badPixels, hdu } = options;
  const spectrograph = file === undefined ? undefined : await readSpectrograph(file);
  progress.stage("reading calibration frames");
  const given = Object.entries({ detector, bias, dark, pixelFlat, badPixels, hdu }).filter(
    ([, value]) => value !== undefined,
  );
  const calibrations = await loadCalibrations(Object.fromEntries(given), spectrograph);
  const inputs = [...fileInputs(file), ...calibrations.inputs];
  return { options, spectrograph, calibrations, inputs };
}

/** One raw frame, corrected, and counted among the bench's inputs. "-" is standard input. `workBytes`: what those who work on it
 * will write into its memory. */
export async function readFrame(path: string, role: Role, bench: Bench, workBytes = 0): Promise<Frame> {
  const raw = await readRaw(path, bench, true);
  touchBehind(raw, workBytes);
  return correctFrame(raw, bench.calibrations, bench.spectrograph, { role });
}

/** Other threads touch the memory behind `raw` as far as work on its frame, which takes the place of `raw`, will reach. */
function touchBehind({ data, memory, room }: RawImage, workBytes: number): void {
  if (memory === undefined || room === undefined) return;
  const end = data.byteOffset + data.byteLength;
  memory.touchAhead(end, room.byteOffset + room.length + workBytes - end);
}

/** @param forFrame the frame that is made of it, and what works on that, may take its place in memory. */
async function readRaw(path: string, bench: Bench, forFrame: boolean): Promise<RawImage> {
  const raw = await readImage(path, { hdu: bench.options.hdu, forFrame });
  bench.inputs.push({ name: raw.name, checksum: raw.checksum });
  return raw;
}

/** Traces the flats and measures their profile.
 * @throws TraceError, NamingError. */
export async function traceFlats(
  flats: string[],
  bench: Bench,
  progress: Progress,
  profile: ProfileKind | "auto" = "auto",
): Promise<Traced> {
  return traceFlatFiles(flats, bench, { profile, hdu: bench.options.hdu, onStage: (label) => progress.stage(label) });
}

/** What --tramlines names; undefined when it is not given. */
export async function givenTramlines({ tramlines: file }: TramlineOptions): Promise<Tramlines | undefined> {
  return file === undefined ? undefined : readTramlines(readOnce(file), file);
}

/** --tramlines or --flat, whichever was given, for `frame`. `given`: those of --tramlines, where they are read already.
 * @throws UsageError for none or both, TraceError when they come from another readout window. */
export async function tramlinesFor(
  frame: Frame,
  options: TramlineOptions,
  bench: Bench,
  progress: Progress,
  given?: Tramlines,
): Promise<TracedFor> {
  const { flat, tramlines: file } = options;
  const tramlines = given ?? (await givenTramlines(options));
  const traced =
    tramlines === undefined
      ? await traceFlats(flat ?? [], bench, progress, options.profile)
      : { tramlines, assumptions: [], warnings: [] };
  bench.inputs.push(...fileInputs(file));
  checkGeometry(frame, traced.tramlines, file === undefined ? flat?.join(", ") : file);
  return { ...traced, plan: planFor(traced.tramlines, file ?? flat?.join(", ") ?? "") };
}

export function requireTramlineSource(command: string, { flat, tramlines }: TramlineOptions): void {
  if ((flat === undefined) !== (tramlines === undefined)) return;
  const finding =
    flat === undefined ? "neither --flat nor --tramlines is given" : "both --flat and --tramlines are given";
  throw new UsageError(`hatchel ${command}: ${finding}; give one of them, to tell where the fibres' light runs.`);
}

/** What the calibration options come to, as lines for HISTORY. */
export function frameLines(options: FrameOptions & TramlineOptions): string[] {
  const { spectrograph, detector, bias, dark, pixelFlat, badPixels, hdu, flat, tramlines } = options;
  const roles = {
    flat,
    tramlines,
    spectrograph,
    detector,
    bias,
    dark,
    "pixel-flat": pixelFlat,
    "bad-pixels": badPixels,
  };
  const lines = Object.entries(roles).flatMap(([role, files]) =>
    [files ?? []].flat().map((path) => `${role} ${basename(path)}`),
  );
  if (flat !== undefined) lines.push(`profile ${options.profile ?? "auto"}`);
  if (options.trustNames === true) lines.push("trust-names");
  return hdu === undefined ? lines : [...lines, `hdu ${hdu}`];
}

/** @throws RefusalError for an aperture that reaches further than the pixels that are looked at. */
export function requireAperture(halfAperture: number | undefined, { plan }: TracedFor): void {
  if (halfAperture === undefined || halfAperture <= plan.halfWindow) return;
  throw new RefusalError(
    `--half-aperture is ${halfAperture} px, but only ${plan.halfWindow} px to either side of a fibre are looked at; give at most that`,
  );
}

function planFor(tramlines: Tramlines, name: string): ExtractionPlan {
  try {
    return planExtraction(tramlines);
  } catch (error) {
    if (!(error instanceof RangeError)) throw error;
    throw new RefusalError(`${name}: ${error.message}`);
  }
}

/** A path as it is; what can be read only once, as bytes: a pipe, or standard input. */
function readOnce(path: string): string | Uint8Array {
  if (path === "-") return readFileSync(process.stdin.fd);
  return statSync(path).isFIFO() ? readFileSync(path) : path;
}

/** A file that is no image: its name and the first 16 digits of the SHA-256 of its bytes. None for a pipe. */
export function fileInputs(path: string | undefined): { name: string; checksum: string }[] {
  if (path === undefined || path === "-" || !statSync(path).isFile()) return [];
  return [
    { name: basename(path), checksum: createHash("sha256").update(readFileSync(path)).digest("hex").slice(0, 16) },
  ];
}
