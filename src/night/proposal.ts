/** A night plan proposed from a folder: what the frames' headers say they are, and what they do not say. */
import { existsSync, readdirSync, statSync } from "node:fs";
import { basename, dirname, join, resolve } from "node:path";
import type { ExposureKind } from "../detector/exposure.js";
import { geometryDifferences } from "../detector/geometry.js";
import { FitsError } from "../fits/errors.js";
import { readSpectrograph, type Spectrograph, SpectrographError } from "../spectrograph.js";
import { type FrameHeader, readFrameHeader } from "./frameHeader.js";
import { isFrameName, stemOf } from "./frameNames.js";
import { type CalibrationRole, PlanError } from "./plan.js";

export interface Proposal {
  folder: string;
  /** Absolute paths. */
  spectrograph?: string;
  badPixels?: string;
  hdu?: number;
  /** Of the readout that is taken, in the order in which they were exposed. */
  frames: Record<CalibrationRole, FrameHeader[]>;
  objects: { name: string; frames: FrameHeader[] }[];
  /** Whether the arcs can give wavelengths, by what the spectrograph file says; true without arcs. */
  wavelengths: boolean;
  /** Frames without a role, and why. */
  left: { name: string; why: string }[];
  /** What was assumed, and what an observer should look at, one sentence each. */
  assumptions: string[];
  warnings: string[];
}

const ROLE_OF: Partial<Record<ExposureKind, CalibrationRole>> = {
  bias: "bias",
  dark: "dark",
  "detector flat": "pixelFlat",
  "fibre flat": "fibreFlat",
  arc: "arc",
  twilight: "twilight",
};

/** Proposes a plan for the frames in `folder`, by their headers.
 * @throws PlanError when there is no folder, or no frame in it. */
export async function proposePlan(folder: string, options: { hdu?: number } = {}): Promise<Proposal> {
  const names = frameNames(folder);
  const proposal = emptyProposal(resolve(folder), options.hdu);
  const spectrograph = await findSpectrograph(proposal);
  findBadPixels(proposal, spectrograph);
  const headers: FrameHeader[] = [];
  for (const name of names) {
    const path = join(proposal.folder, name);
    if (path === proposal.badPixels || path === spectrograph?.detector.badPixels) continue;
    try {
      headers.push(await readFrameHeader(path, spectrograph, options.hdu));
    } catch (error) {
      if (!(error instanceof FitsError)) throw error;
      proposal.left.push({ name, why: "cannot be read" });
      proposal.warnings.push(error.message);
    }
  }
  if (headers.length === 0) {
    throw new PlanError(
      `${folder}: there is no FITS frame in this folder; name the folder that the raw frames lie in.`,
    );
  }
  headers.sort((a, b) => compare(a.started, b.started) || compare(a.name, b.name));
  for (const frame of ofOneReadout(headers, proposal)) assign(frame, proposal);
  settleFlats(proposal);
  const { range, lamps = [], lines } = spectrograph?.wavelength ?? {};
  const named = range !== undefined && (lamps.length > 0 || lines !== undefined);
  proposal.wavelengths = named || proposal.frames.arc.length === 0;
  tellWhatIsMissing(proposal, spectrograph);
  return proposal;
}

function compare(a: string, b: string): number {
  return a < b ? -1 : a > b ? 1 : 0;
}

function emptyProposal(folder: string, hdu: number | undefined): Proposal {
  return {
    folder,
    ...(hdu === undefined ? {} : { hdu }),
    frames: { bias: [], dark: [], pixelFlat: [], fibreFlat: [], arc: [], twilight: [] },
    objects: [],
    wavelengths: true,
    left: [],
    assumptions: [],
    warnings: [],
  };
}

function frameNames(folder: string): string[] {
  if (!statSync(folder, { throwIfNoEntry: false })?.isDirectory()) {
    const found = existsSync(folder) ? "this is no folder" : "there is no such folder";
    throw new PlanError(`${folder}: ${found}; name the folder that the raw frames lie in.`);
  }
  return readdirSync(folder).filter(isFrameName).sort();
}

/** The one spectrograph file in the folder or the one above. */
async function findSpectrograph(proposal: Proposal): Promise<Spectrograph | undefined> {
  for (const place of [proposal.folder, dirname(proposal.folder)]) {
    const found: Spectrograph[] = [];
    const paths: string[] = [];
    for (const name of readdirSync(place)
      .filter((one) => one.endsWith(".toml"))
      .sort()) {
      try {
        found.push(await readSpectrograph(join(place, name)));
        paths.push(join(place, name));
      } catch (error) {
        // Other TOML files, a night plan or a scene, are not meant; one by that name is.
        if (!(error instanceof SpectrographError)) throw error;
        if (/spectrograph/i.test(name)) proposal.warnings.push(error.message);
      }
    }
    if (found.length > 1) {
      const names = paths.map((path) => basename(path)).join(", ");
      proposal.warnings.push(
        `${place}: ${names} all read as spectrograph files, so none is proposed; write the right one into the plan.`,
      );
      return undefined;
    }
    if (found.length === 1) {
      proposal.spectrograph = paths[0];
      proposal.assumptions.push(`${paths[0]} is taken as the spectrograph file, since it lies beside the frames.`);
      return found[0];
    }
  }
  return undefined;
}

/** A mask beside the frames, unless the spectrograph file names one. */
function findBadPixels(proposal: Proposal, spectrograph: Spectrograph | undefined): void {
  if (spectrograph?.detector.badPixels !== undefined) return;
  for (const place of [proposal.folder, dirname(proposal.folder)]) {
    const masks = readdirSync(place).filter((name) => isFrameName(name) && /bad[-_ ]?(pix|mask)|bpm/i.test(name));
    if (masks.length !== 1) continue;
    proposal.badPixels = join(place, masks[0]);
    proposal.assumptions.push(`${proposal.badPixels} is taken as the image of bad pixels, by its name.`);
    return;
  }
}

/** The frames of the readout to which most object frames belong; of the others it is said how they differ. */
function ofOneReadout(headers: FrameHeader[], proposal: Proposal): FrameHeader[] {
  const groups = new Map<string, FrameHeader[]>();
  for (const frame of headers) groups.set(frame.readout, [...(groups.get(frame.readout) ?? []), frame]);
  const nObject = (group: FrameHeader[]) => group.filter(({ kind }) => kind === "science").length;
  const [main, ...others] = [...groups.values()].sort((a, b) => nObject(b) - nObject(a) || b.length - a.length);
  for (const problem of new Set(main.flatMap(({ geometryProblem }) => geometryProblem ?? []))) {
    proposal.warnings.push(problem);
  }
  for (const group of others) {
    const [one] = group;
    const how =
      one.geometry && main[0].geometry
        ? geometryDifferences(one.geometry, main[0].geometry).join("; ")
        : (one.geometryProblem ?? main[0].geometryProblem);
    const names = group.map(({ name }) => name);
    proposal.warnings.push(
      `${few(names)}: of another readout than ${main[0].name} (${how}), so left out; make a plan of their own for them, in a folder of their own.`,
    );
    for (const name of names) proposal.left.push({ name, why: "of another readout" });
  }
  return main;
}

function few(names: string[]): string {
  return names.length > 4 ? `${names.slice(0, 3).join(", ")} and ${names.length - 3} more` : names.join(", ");
}

function assign(frame: FrameHeader, proposal: Proposal): void {
  const role = ROLE_OF[frame.kind];
  if (role !== undefined) proposal.frames[role].push(frame);
  else if (frame.kind === "science") assignObject(frame, proposal);
  else if (frame.kind === "flat") proposal.left.push({ name: frame.name, why: "a flat" });
  else {
    const said = frame.kindFrom === "" ? "no card says what it is" : frame.kindFrom;
    proposal.left.push({ name: frame.name, why: `unknown kind: ${said}` });
    proposal.warnings.push(
      `${frame.name}: neither IMAGETYP nor OBJECT says what kind of frame it is, so it has no role; write it into the plan where it belongs.`,
    );
  }
  if (frame.kind !== "bias" && frame.kind !== "unknown" && Number.isNaN(frame.seconds)) {
    proposal.warnings.push(`${frame.name}: its header gives no EXPTIME; dark current and light per second need it.`);
  }
}

function assignObject(frame: FrameHeader, proposal: Proposal): void {
  const name = frame.object === "" ? stemOf(frame.name) : frame.object;
  if (frame.object === "") {
    proposal.warnings.push(
      `${frame.name}: it has no OBJECT, so it stands alone under its file's name; join it to its field by hand if it belongs to one.`,
    );
  }
  const field = proposal.objects.find((one) => one.name === name);
  if (field === undefined) {
    proposal.objects.push({ name, frames: [frame] });
    return;
  }
  field.frames.push(frame);
  const [first] = field.frames;
  if (first.pointing === "" || frame.pointing === "" || first.pointing === frame.pointing) return;
  proposal.warnings.push(
    `${frame.name}: OBJECT is '${name}' as in ${first.name}, but it points to ${frame.pointing}, not ${first.pointing}; part them if fibres see other targets, for they would be combined.`,
  );
}

/** Frames that are called flats and no more: fibre flats where there are none, when all of them must be. */
function settleFlats(proposal: Proposal): void {
  const flats = proposal.left.filter(({ why }) => why === "a flat").map(({ name }) => name);
  if (flats.length === 0) return;
  proposal.warnings.push(
    `${few(flats)}: the header calls it a flat, but not whether of the fibres or of the bare detector, so it has no role; put it under fibre_flat or pixel_flat.`,
  );
}

function tellWhatIsMissing(
  { frames, objects, wavelengths, warnings }: Proposal,
  spectrograph: Spectrograph | undefined,
): void {
  const { bias, dark, pixelFlat, fibreFlat, arc, twilight } = frames;
  const say = (when: boolean, sentence: string) => when && warnings.push(sentence);
  say(
    fibreFlat.length === 0,
    "No fibre flat: without one nothing tells where the fibres' light runs, and the night cannot be run.",
  );
  say(objects.length === 0, "No object frame: only calibrations would be made.");
  say(bias.length === 0, "No bias frame: structure of the bias beyond the overscan's level stays in.");
  say(
    bias.length === 1,
    `Only one bias frame, ${bias[0]?.name}: its read noise goes into every frame; take five or more.`,
  );
  say(dark.length === 0, "No dark frame: dark current is taken as 0.");
  say(pixelFlat.length === 0, "No pixel flat: all pixels are taken to respond alike.");
  say(
    fibreFlat.length === 1,
    `Only one fibre flat, ${fibreFlat[0]?.name}: the gain cannot be checked on a pair, and a cosmic ray in it stays.`,
  );
  say(arc.length === 0, "No arc: the spectra will have no wavelengths, and no sky can be taken off.");
  say(
    !wavelengths,
    `${spectrograph === undefined ? "No spectrograph file" : spectrograph.file}: without 'wavelength.range' and 'wavelength.lamps' the arcs' lines cannot be named, so no wavelengths are proposed.`,
  );
  say(
    twilight.length === 0,
    "No twilight: fibres are compared by the fibre flat, whose lamp may not light them evenly.",
  );
  say(
    spectrograph === undefined,
    "No spectrograph file beside the frames: fibres are numbered as they are found, dead ones not counted, and no fibre is known to see the sky alone.",
  );
  say(
    spectrograph !== undefined && (spectrograph.slit?.sky.length ?? 0) < 2,
    `${spectrograph?.file}: 'slit.sky' names fewer than two fibres, so no sky can be taken off.`,
  );
  const zero = objects.flatMap((one) => one.frames).filter(({ seconds }) => seconds === 0);
  say(zero.length > 0, `${few(zero.map(({ name }) => name))}: an object frame of 0 s; leave it out if it is a test.`);
}
