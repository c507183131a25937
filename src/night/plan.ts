/** The night plan: which frame plays which role, which frames show one field, and what is wanted of them, in TOML. */
import { existsSync } from "node:fs";
import { readFile } from "node:fs/promises";
import { basename, dirname, resolve } from "node:path";
import type { PrecisionChoice } from "../extraction/precision.js";
import type { Method } from "../reference/extract.js";
import { readSpectrograph, type Spectrograph } from "../spectrograph.js";
import { tomlComplaint, tomlTree } from "../tomlSentences.js";
import type { ProfileKind } from "../tramlines/profiles.js";
import { fileWord, stemOf } from "./frameNames.js";
import { PLAN_VALUES, type PlanTree, planSchema } from "./planKeys.js";

export interface Wanted {
  method: Method;
  crosstalk: boolean;
  precision: PrecisionChoice;
  cosmicRays: boolean;
  refine: boolean;
  halfAperture?: number;
  profile: ProfileKind | "auto";
  trustNames: boolean;
  /** Whether spectra get wavelengths; throughput, sky and rebinning need them. */
  wavelengths: boolean;
  throughput: "twilight" | "fibre flat" | "off";
  sky: SkyChoice;
  combine: boolean;
  rebin: "off" | "linear" | "log";
  /** Å for linear, km/s for log. */
  rebinStep?: number;
  /** Å, middles of the first and the last bin. */
  rebinRange?: [number, number];
  tables: "off" | "ecsv" | "fits";
}

/** One field. */
export interface NightObject {
  name: string;
  /** Absolute paths. */
  frames: string[];
  sky: SkyChoice;
  /** Into one set of spectra. */
  combine: boolean;
}

export type SkyChoice = "on" | "off" | "scaled";

export type CalibrationRole = "bias" | "dark" | "pixelFlat" | "fibreFlat" | "arc" | "twilight";

export interface NightPlan {
  /** What to call the file in messages. */
  file: string;
  name: string;
  /** Absolute paths, all of them. */
  folder: string;
  spectrograph?: string;
  /** The plan's, else the spectrograph file's. */
  badPixels?: string;
  /** What the spectrograph file says. */
  known?: Spectrograph;
  hdu?: number;
  frames: Record<CalibrationRole, string[]>;
  objects: NightObject[];
  wanted: Wanted;
}

export class PlanError extends Error {
  override name = "PlanError";
}

/** Reads a plan, and the spectrograph file that it names; paths in them are seen from their own folders.
 * @throws PlanError or SpectrographError naming file, key, what was found and what was expected. */
export async function readPlan(path: string): Promise<NightPlan> {
  let text: string;
  try {
    text = await readFile(path, "utf8");
  } catch (error) {
    const reasons: Record<string, string> = { ENOENT: "there is no such file", EISDIR: "this is a folder" };
    const reason = reasons[(error as NodeJS.ErrnoException).code ?? ""] ?? "it cannot be read";
    throw new PlanError(`${path}: ${reason}, but a night plan in TOML was expected; 'hatchel plan' writes one.`);
  }
  const place = { file: basename(path), folder: dirname(resolve(path)) };
  const { spectrograph } = treeOf(text, place.file);
  if (spectrograph === undefined) return parsePlan(text, place);
  const other = resolve(place.folder, spectrograph);
  requireFile(other, "'spectrograph'", place.file);
  return parsePlan(text, place, await readSpectrograph(other));
}

/** The same from the text itself. `folder`: where its relative paths start; `known`: what the spectrograph file says. */
export function parsePlan(
  text: string,
  { file, folder }: { file: string; folder: string },
  known?: Spectrograph,
): NightPlan {
  const tree = treeOf(text, file);
  const plan = named(tree, file, folder, known);
  checkFiles(plan);
  checkWanted(plan);
  checkSky(plan, tree);
  return plan;
}

function treeOf(text: string, file: string): PlanTree {
  const parsed = tomlTree(text, file);
  if ("complaint" in parsed) throw new PlanError(parsed.complaint);
  const result = planSchema.safeParse(parsed.tree);
  if (result.success) return result.data;
  throw new PlanError(tomlComplaint(file, parsed.tree, result.error.issues[0], PLAN_VALUES));
}

function named(tree: PlanTree, file: string, home: string, known: Spectrograph | undefined): NightPlan {
  const folder = resolve(home, tree.folder ?? ".");
  const { frames = {}, wanted = {} } = tree;
  const paths = (names: string[] | undefined) => (names ?? []).map((name) => resolve(folder, name));
  const from = (name: string | undefined) => (name === undefined ? undefined : resolve(home, name));
  const wavelengths = wanted.wavelengths ?? frames.arc !== undefined;
  const sky = wanted.sky ?? (wavelengths && (known?.slit?.sky ?? []).length > 1 ? "on" : "off");
  const even = frames.twilight === undefined ? "fibre flat" : "twilight";
  return {
    ...{ file, folder, name: tree.name ?? basename(folder) },
    ...given({ spectrograph: from(tree.spectrograph), known, hdu: tree.hdu }),
    ...given({ badPixels: from(tree.bad_pixels) ?? known?.detector.badPixels }),
    frames: {
      bias: paths(frames.bias),
      dark: paths(frames.dark),
      pixelFlat: paths(frames.pixel_flat),
      fibreFlat: paths(frames.fibre_flat),
      arc: paths(frames.arc),
      twilight: paths(frames.twilight),
    },
    objects: (tree.object ?? []).map((entry) => ({
      ...{ name: entry.name, frames: paths(entry.frames) },
      ...{ sky: entry.sky ?? sky, combine: entry.combine ?? wanted.combine ?? true },
    })),
    wanted: {
      method: wanted.method ?? "joint",
      crosstalk: wanted.crosstalk ?? true,
      precision: wanted.precision ?? "auto",
      cosmicRays: wanted.cosmic_rays ?? true,
      refine: wanted.refine ?? true,
      profile: wanted.profile ?? "auto",
      trustNames: wanted.trust_names ?? false,
      wavelengths,
      throughput: wavelengths ? (wanted.throughput ?? even) : "off",
      ...{ sky, combine: wanted.combine ?? true },
      rebin: wanted.rebin ?? "off",
      tables: wanted.tables ?? "off",
      ...given({ halfAperture: wanted.half_aperture, rebinStep: wanted.rebin_step, rebinRange: wanted.rebin_range }),
    },
  };
}

type Given<T> = { [K in keyof T]?: Exclude<T[K], undefined> };

/** Without the keys that have no value. */
function given<T extends object>(entries: T): Given<T> {
  return Object.fromEntries(Object.entries(entries).filter(([, value]) => value !== undefined)) as Given<T>;
}

/** @param key what names it, for the message. */
function requireFile(path: string, key: string, file: string): void {
  if (existsSync(path)) return;
  throw new PlanError(`${file}: ${key} names ${path}, but there is no such file; correct the name or leave it out.`);
}

/** Every file there, none in two roles, no two object frames whose products would bear one name. */
function checkFiles({ file, spectrograph, badPixels, known, frames, objects }: NightPlan): void {
  const roles = new Map<string, string>();
  const take = (path: string, role: string, alone: boolean) => {
    requireFile(path, role, file);
    const other = roles.get(path);
    if (alone && other !== undefined) {
      const finding = other === role ? `${role} names it twice` : `it stands in ${other} and in ${role}`;
      throw new PlanError(`${file}: ${basename(path)}: ${finding}, but a frame plays one role; leave one of them out.`);
    }
    roles.set(path, role);
  };
  if (spectrograph !== undefined) take(spectrograph, "'spectrograph'", false);
  const isKnown = badPixels !== undefined && badPixels === known?.detector.badPixels;
  if (badPixels !== undefined)
    take(badPixels, isKnown ? `'detector.bad_pixels' of ${known.file}` : "'bad_pixels'", false);
  const lines = known?.wavelength?.lines;
  if (lines !== undefined) take(lines, `'wavelength.lines' of ${known!.file}`, false);
  const keys = { bias: "bias", dark: "dark", pixelFlat: "pixel_flat", fibreFlat: "fibre_flat", arc: "arc" };
  for (const [role, key] of Object.entries({ ...keys, twilight: "twilight" })) {
    for (const path of frames[role as CalibrationRole]) take(path, `'frames.${key}'`, true);
  }
  for (const { name, frames: list } of objects) for (const path of list) take(path, `object '${name}'`, true);
  const stems = new Map<string, string>();
  for (const path of [
    ...frames.arc,
    ...frames.twilight,
    ...frames.fibreFlat,
    ...objects.flatMap((one) => one.frames),
  ]) {
    const other = stems.get(stemOf(path));
    if (other !== undefined) {
      throw new PlanError(
        `${file}: the spectra of ${other} and of ${path} would both be called ${stemOf(path)}; rename one of them.`,
      );
    }
    stems.set(stemOf(path), path);
  }
  const names = objects.map(({ name }) => name);
  const twice = names.find((name, i) => names.findIndex((one) => fileWord(one) === fileWord(name)) < i);
  if (twice === undefined) return;
  const first = names.find((name) => fileWord(name) === fileWord(twice))!;
  const finding =
    first === twice ? `two objects are called '${twice}'` : `objects '${first}' and '${twice}' would become one file`;
  throw new PlanError(`${file}: ${finding}; put their frames into one, or rename one of them.`);
}

function checkWanted({ file, frames, objects, wanted }: NightPlan): void {
  const { method, crosstalk, halfAperture } = wanted;
  if (method === "joint" && !crosstalk) {
    throw new PlanError(
      `${file}: 'wanted.crosstalk' is false, but joint always parts neighbours' light; choose method = "optimal" or "boxcar" with it.`,
    );
  }
  if (method !== "boxcar" && halfAperture !== undefined) {
    throw new PlanError(
      `${file}: 'wanted.half_aperture' is the boxcar's, but the method is ${method}; choose method = "boxcar" with it.`,
    );
  }
  if (frames.fibreFlat.length > 0) return;
  const finding = objects.length === 0 ? "the plan names no fibre flat and no object" : "the plan names no fibre flat";
  throw new PlanError(
    `${file}: ${finding}, and without one nothing tells where the fibres' light runs; add 'frames.fibre_flat'.`,
  );
}

/** What needs wavelengths, and what wavelengths need. */
function checkSky({ file, known, frames, objects, wanted }: NightPlan, tree: PlanTree): void {
  const refusal = (finding: string, remedy: string) => new PlanError(`${file}: ${finding}; ${remedy}.`);
  const off = "or set wavelengths = false under [wanted]";
  if (!wanted.wavelengths) {
    const needs = {
      "wanted.throughput": tree.wanted?.throughput,
      "wanted.rebin": tree.wanted?.rebin,
      "wanted.sky": wanted.sky,
    };
    for (const [key, value] of Object.entries(needs)) {
      if (value === undefined || value === "off") continue;
      throw refusal(
        `'${key}' is "${value}", but no wavelengths are wanted`,
        "list arcs under [frames], or leave the key out",
      );
    }
  } else {
    if (frames.arc.length === 0)
      throw refusal("'wanted.wavelengths' is true, but there is no arc", `list some as 'frames.arc', ${off}`);
    const { range, lamps = [], lines } = known?.wavelength ?? {};
    const where = known === undefined ? "and there is no spectrograph file" : `but ${known.file} has no`;
    const what =
      range === undefined
        ? "'wavelength.range'"
        : lamps.length === 0 && lines === undefined
          ? "'wavelength.lamps'"
          : undefined;
    if (what !== undefined) {
      const finding = `arcs are to give wavelengths, ${where} ${known === undefined ? `with ${what}` : what}`;
      throw refusal(finding, `add it, so that their lines can be named, ${off}`);
    }
    if (wanted.throughput === "twilight" && frames.twilight.length === 0) {
      throw refusal(
        "'wanted.throughput' is \"twilight\", but there is none",
        "list some as 'frames.twilight', or choose \"fibre flat\"",
      );
    }
  }
  const wants = objects.find(({ sky }) => sky !== "off");
  if (wants === undefined) return;
  const finding = !wanted.wavelengths
    ? "no wavelengths are wanted"
    : (known?.slit?.sky ?? []).length < 2
      ? "fewer than two sky fibres are known"
      : undefined;
  if (finding === undefined) return;
  throw refusal(
    `the sky is to be taken off '${wants.name}', but ${finding}`,
    "list the fibres that see the sky alone as 'slit.sky' of the spectrograph file, or set sky = \"off\" under [wanted]",
  );
}
