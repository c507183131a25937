/** From fibre flats on disk to tramlines with their profile, named as the spectrograph file says. */
import { basename } from "node:path";
import type { Calibrations } from "../detector/calibrations.js";
import { correctFrame } from "../detector/correct.js";
import { flatWarnings } from "../detector/flatWarnings.js";
import type { Frame } from "../detector/frame.js";
import { imageFiles } from "../detector/loadCalibrations.js";
import type { RawImage } from "../detector/raw.js";
import type { Header } from "../fits/header.js";
import type { Spectrograph } from "../spectrograph.js";
import { stackFlats } from "./flatStack.js";
import type { SlitLayout } from "./layout.js";
import { chooseProfile, type ProfileKind, type TriedProfile } from "./profiles.js";
import { type Tracing, traceFlat } from "./trace.js";
import type { Tramlines } from "./tramlines.js";

/** A tracing whose tramlines have the profile that was asked for. */
export interface ProfiledTracing extends Tracing {
  tried: TriedProfile[];
}

export interface TracedFlats {
  tramlines: Tramlines;
  tracing: ProfiledTracing;
  /** The first flat's. */
  header: Header;
  assumptions: string[];
  warnings: string[];
}

/** What flats are corrected with; every one that is read is added to `inputs`. */
export interface FlatBench {
  spectrograph: Spectrograph | undefined;
  calibrations: Calibrations;
  inputs: { name: string; checksum: string }[];
}

export interface FlatFileOptions {
  profile: ProfileKind | "auto";
  hdu?: number | undefined;
  /** Called with what is done next. */
  onStage?: (label: string) => void;
}

/** Traces the flats and measures their profile.
 * @throws TraceError, NamingError, and what reading and correcting throw. */
export async function traceFlatFiles(
  flats: string[],
  { calibrations, spectrograph, inputs }: FlatBench,
  { profile, hdu, onStage = () => {} }: FlatFileOptions,
): Promise<TracedFlats> {
  const files = imageFiles(flats, hdu);
  const raws = new Map<number, RawImage>();
  const sums = new Map<number, { name: string; checksum: string }>();
  const read = async (index: number): Promise<Frame> => {
    onStage(`reading ${basename(flats[index])}`);
    // Two are asked for the gain later on.
    const forFrame = raws.size === 2 && !raws.has(index);
    const raw = await files.read(index, forFrame);
    sums.set(index, { name: raw.name, checksum: raw.checksum });
    const frame = correctFrame(raw, calibrations, spectrograph, { role: "fibre flat" });
    if (!forFrame) raws.set(index, raw);
    return frame;
  };
  const { flat, used, ...notes } = await stackFlats({ length: flats.length, read });
  inputs.push(...used.map((index) => sums.get(index)!));
  onStage("tracing the flat");
  const { layout, warning } = slitLayout(spectrograph);
  const traced = await traceFlat(flat, layout);
  const pair = used.flatMap((index) => raws.get(index) ?? []);
  const detector = flatWarnings(pair, [flat.frame], calibrations, spectrograph);
  onStage("measuring the profile");
  const { tramlines, tried } = await chooseProfile(flat, traced.tramlines, profile);
  const tracing = { ...traced, tramlines, tried };
  return {
    tramlines,
    tracing,
    header: flat.frame.header,
    assumptions: [...notes.assumptions, ...traced.assumptions],
    warnings: [...warning, ...notes.warnings, ...detector, ...traced.warnings],
  };
}

function slitLayout(spectrograph: Spectrograph | undefined): { layout?: SlitLayout; warning: string[] } {
  const slit = spectrograph?.slit;
  if (slit === undefined) return { warning: [] };
  const { blocks, pitch, gap, dead, sky } = slit;
  const missing = blocks === undefined ? "blocks" : pitch === undefined ? "pitch" : undefined;
  if (missing !== undefined) {
    const sentence = `${spectrograph!.file}: 'slit.${missing}' is missing, so the fibres are numbered as they are found; add it to have them named.`;
    return { warning: [sentence] };
  }
  return { layout: { blocks: blocks!, pitch: pitch!, gap: gap ?? 0, dead, sky }, warning: [] };
}
