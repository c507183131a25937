/** The night plan: which frame plays which role, which frames show one field, and what is wanted of them, in TOML. */
import { existsSync } from "node:fs";
import { readFile } from "node:fs/promises";
import { basename, dirname, resolve } from "node:path";
import type { PrecisionChoice } from "../extraction/precision.js";
import type { Method } from "../reference/extract.js";
import { readSpectrograph, type Spectrograph } from "../spectrograph.js";
import { tomlComplaint, tomlTree } from "../tomlSentences.js";
import type { ProfileKind } from "../tramlines/profiles.js";
import { stemOf } from "./frameNames.js";
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
  tables: "off" | "ecsv" | "fits";
}

/** One field. */
export interface NightObject {
  name: string;
  /** Absolute paths. */
  frames: string[];
}

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
  const plan = parsePlan(text, { file: basename(path), folder: dirname(resolve(path)) });
  return plan.spectrograph === undefined ? plan : knowing(plan, await readSpectrograph(plan.spectrograph));
}

function knowing(plan: NightPlan, known: Spectrograph): NightPlan {
  const badPixels = plan.badPixels ?? known.detector.badPixels;
  if (badPixels !== undefined && !existsSync(badPixels)) {
    throw new PlanError(
      `${known.file}: 'detector.bad_pixels' names ${badPixels}, but there is no such file; correct the name or leave it out.`,
    );
  }
  return { ...plan, known, ...(badPixels === undefined ? {} : { badPixels }) };
}

/** The same from the text itself. `folder`: where its relative paths start. */
export function parsePlan(text: string, { file, folder }: { file: string; folder: string }): NightPlan {
  const parsed = tomlTree(text, file);
  if ("complaint" in parsed) throw new PlanError(parsed.complaint);
  const result = planSchema.safeParse(parsed.tree);
  if (!result.success) {
    throw new PlanError(tomlComplaint(file, parsed.tree, result.error.issues[0], PLAN_VALUES));
  }
  const plan = named(result.data, file, folder);
  checkFiles(plan);
  checkWanted(plan);
  return plan;
}

function named(tree: PlanTree, file: string, home: string): NightPlan {
  const folder = resolve(home, tree.folder ?? ".");
  const { frames = {}, wanted = {} } = tree;
  const paths = (names: string[] | undefined) => (names ?? []).map((name) => resolve(folder, name));
  return {
    file,
    name: tree.name ?? basename(folder),
    folder,
    ...(tree.spectrograph === undefined ? {} : { spectrograph: resolve(home, tree.spectrograph) }),
    ...(tree.bad_pixels === undefined ? {} : { badPixels: resolve(home, tree.bad_pixels) }),
    ...(tree.hdu === undefined ? {} : { hdu: tree.hdu }),
    frames: {
      bias: paths(frames.bias),
      dark: paths(frames.dark),
      pixelFlat: paths(frames.pixel_flat),
      fibreFlat: paths(frames.fibre_flat),
      arc: paths(frames.arc),
      twilight: paths(frames.twilight),
    },
    objects: (tree.object ?? []).map((entry) => ({ name: entry.name, frames: paths(entry.frames) })),
    wanted: {
      method: wanted.method ?? "joint",
      crosstalk: wanted.crosstalk ?? true,
      precision: wanted.precision ?? "auto",
      cosmicRays: wanted.cosmic_rays ?? true,
      refine: wanted.refine ?? true,
      ...(wanted.half_aperture === undefined ? {} : { halfAperture: wanted.half_aperture }),
      profile: wanted.profile ?? "auto",
      trustNames: wanted.trust_names ?? false,
      tables: wanted.tables ?? "off",
    },
  };
}

/** Every file there, none in two roles, no two object frames whose products would bear one name. */
function checkFiles({ file, spectrograph, badPixels, frames, objects }: NightPlan): void {
  const roles = new Map<string, string>();
  const take = (path: string, role: string, alone: boolean) => {
    if (!existsSync(path)) {
      throw new PlanError(
        `${file}: ${role} names ${path}, but there is no such file; correct the name or leave it out.`,
      );
    }
    const other = roles.get(path);
    if (alone && other !== undefined) {
      const finding = other === role ? `${role} names it twice` : `it stands in ${other} and in ${role}`;
      throw new PlanError(`${file}: ${basename(path)}: ${finding}, but a frame plays one role; leave one of them out.`);
    }
    roles.set(path, role);
  };
  if (spectrograph !== undefined) take(spectrograph, "'spectrograph'", false);
  if (badPixels !== undefined) take(badPixels, "'bad_pixels'", false);
  const keys = { bias: "bias", dark: "dark", pixelFlat: "pixel_flat", fibreFlat: "fibre_flat", arc: "arc" };
  for (const [role, key] of Object.entries({ ...keys, twilight: "twilight" })) {
    for (const path of frames[role as CalibrationRole]) take(path, `'frames.${key}'`, true);
  }
  const stems = new Map<string, string>();
  for (const { name, frames } of objects) {
    for (const path of frames) {
      take(path, `object '${name}'`, true);
      const other = stems.get(stemOf(path));
      if (other !== undefined) {
        throw new PlanError(
          `${file}: ${other} and ${path} would both become ${stemOf(path)}.spectra.fits; rename one of them.`,
        );
      }
      stems.set(stemOf(path), path);
    }
  }
  const names = objects.map(({ name }) => name);
  const twice = names.find((name, i) => names.indexOf(name) < i);
  if (twice === undefined) return;
  throw new PlanError(`${file}: two objects are called '${twice}'; put their frames into one, or rename one of them.`);
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
