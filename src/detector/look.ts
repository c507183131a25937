/** What is in a frame, and what would be assumed of it: plain data for a report. */
import { readImage } from "../fits/image.js";
import type { Spectrograph } from "../spectrograph.js";
import { detectorLayout } from "./amplifiers.js";
import { type Assembled, assemble } from "./assemble.js";
import { DetectorError } from "./detectorError.js";
import { type ExposureKind, exposureKind, exposureSeconds } from "./exposure.js";
import type { DetectorGeometry } from "./frame.js";
import { frameWarnings } from "./frameSanity.js";
import { type Levels, levelsOf, missingShare } from "./levels.js";
import { type AmplifierNoise, measureNoise, type NoiseFrames } from "./noise.js";
import type { RawImage } from "./raw.js";
import { refuseImpossible } from "./rawSanity.js";
import { type Ribbons, ribbonAxis, ribbonsAlong } from "./ribbons.js";
import { amplifierSeams, type Seam, seamWarnings } from "./seams.js";

export interface LookReport {
  name: string;
  /** Size of the image in the file, FITS axes 1 and 2. */
  axis1: number;
  axis2: number;
  bitpix: number;
  kind: ExposureKind;
  /** The card that says so; empty when none does. */
  kindFrom: string;
  /** s; null when the header does not say. */
  exposureSeconds: number | null;
  /** Absent when the layout cannot be made out; the reason is among the warnings. */
  geometry?: DetectorGeometry;
  /** ADU */
  saturation?: number;
  amplifiers: AmplifierNoise[];
  /** Steps of the light between amplifiers, where a flat shows them. */
  seams: Seam[];
  /** e⁻, or ADU above zero where no gain is known. */
  /** `missingShare`: of pixels without a value. */
  levels?: Levels & { missingShare: number };
  levelUnit: "electron" | "adu";
  /** FITS axis along which ribbons of light run in the picture; null when it does not show. */
  dispersionAxisSeen: 1 | 2 | null;
  /** Ribbons in a cut across dispersion. */
  ribbons?: Ribbons;
  assumptions: string[];
  warnings: string[];
}

export interface LookOptions {
  /** Frames of the same readout: pairs of bias frames for the read noise, of flats for the gain. */
  bias?: (string | RawImage)[];
  flats?: (string | RawImage)[];
  /** Which HDU holds the image, from 0. */
  hdu?: number;
}

/** Looks at one frame. What is wrong with it is told among the warnings, so that the rest is seen all the same.
 * @throws FitsError when the file cannot be read at all. */
export async function lookAt(
  frame: string | RawImage,
  spectrograph?: Spectrograph,
  options: LookOptions = {},
): Promise<LookReport> {
  const raw = await opened(frame, options.hdu);
  const bias = await Promise.all((options.bias ?? []).map((entry) => opened(entry, options.hdu)));
  const flats = await Promise.all((options.flats ?? []).map((entry) => opened(entry, options.hdu)));
  const { kind, said } = exposureKind(raw);
  const seconds = exposureSeconds(raw);
  const report: LookReport = {
    name: raw.name,
    axis1: raw.nx,
    axis2: raw.ny,
    bitpix: raw.bitpix ?? Number.NaN,
    kind,
    kindFrom: said,
    exposureSeconds: Number.isNaN(seconds) ? null : seconds,
    amplifiers: [],
    seams: [],
    levelUnit: "electron",
    dispersionAxisSeen: null,
    assumptions: [],
    warnings: [...(raw.warnings ?? [])],
  };
  tellInstead(report, () => refuseImpossible(raw, spectrograph));
  tellInstead(report, () => describe(report, raw, spectrograph));
  tellInstead(report, () => addNoise(report, { frames: [raw], bias, flats }, spectrograph));
  report.assumptions = [...new Set(report.assumptions)];
  report.warnings = [...new Set(report.warnings)];
  return report;
}

async function opened(frame: string | RawImage, hdu: number | undefined): Promise<RawImage> {
  if (typeof frame !== "string") return frame;
  return readImage(frame, hdu === undefined ? {} : { hdu });
}

function tellInstead(report: LookReport, step: () => void): void {
  try {
    step();
  } catch (error) {
    if (!(error instanceof DetectorError)) throw error;
    report.warnings.push(error.message);
  }
}

function describe(report: LookReport, raw: RawImage, spectrograph: Spectrograph | undefined): void {
  const layout = detectorLayout(raw, spectrograph, { gainMayBeMissing: true });
  report.geometry = layout.geometry;
  report.saturation = layout.saturationAdu;
  report.assumptions.push(...layout.assumptions);
  report.warnings.push(...layout.warnings);
  if (layout.amplifiers.some((amplifier) => Number.isNaN(amplifier.gain))) {
    report.levelUnit = "adu";
    for (const amplifier of layout.amplifiers) amplifier.gain = 1;
  }
  const frame = assemble(raw, layout);
  report.levels = { ...levelsOf(frame), missingShare: missingShare(frame) };
  report.warnings.push(...frameWarnings(frame));
  addSeams(report, frame);
  report.ribbons = ribbonsAlong("x", frame.electrons, frame.nx, frame.ny);
  const seen = ribbonAxis(frame.electrons, frame.nx, frame.ny);
  if (seen === undefined) return;
  const axis = layout.dispersionAxis;
  report.dispersionAxisSeen = seen === "x" ? axis : axis === 1 ? 2 : 1;
  if (seen === "x") return;
  report.ribbons = ribbonsAlong("y", frame.electrons, frame.nx, frame.ny);
  report.warnings.push(
    `${raw.name}: wavelength is said to run along axis ${axis}, but the ribbons of light run along axis ${3 - axis}; give dispersion_axis in the spectrograph file.`,
  );
}

/** Lamp light is smooth across a seam; sky, arc and twilight have lines there. */
function addSeams(report: LookReport, frame: Assembled): void {
  if (!["flat", "fibre flat", "detector flat"].includes(report.kind)) return;
  const evenLight = report.kind === "detector flat";
  report.seams = amplifierSeams(frame, evenLight);
  report.warnings.push(...seamWarnings(frame, evenLight));
}

function addNoise(report: LookReport, frames: NoiseFrames, spectrograph: Spectrograph | undefined): void {
  const measured = measureNoise(frames, spectrograph);
  report.amplifiers = measured.amplifiers;
  // The overscan of this one frame was compared already; what pairs say is better and replaces it.
  const isReadNoise = (sentence: string) => sentence.includes("the read noise of amplifier");
  report.warnings = report.warnings.filter((sentence) => !isReadNoise(sentence));
  report.warnings.push(...measured.disagreements, ...measured.warnings);
}
