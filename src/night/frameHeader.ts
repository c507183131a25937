/** What a raw frame's headers say of it, without a look at its pixels. */
import { basename } from "node:path";
import { detectorLayout } from "../detector/amplifiers.js";
import { DetectorError } from "../detector/detectorError.js";
import { type ExposureKind, exposureKind, exposureSeconds } from "../detector/exposure.js";
import type { DetectorGeometry } from "../detector/frame.js";
import { type RawImage, textOf } from "../detector/raw.js";
import { imageHeader } from "../fits/imageHeader.js";
import type { Spectrograph } from "../spectrograph.js";

export interface FrameHeader {
  path: string;
  name: string;
  kind: ExposureKind;
  /** The card that says so; empty when none does. */
  kindFrom: string;
  /** What OBJECT says; empty when it says nothing. */
  object: string;
  /** s; NaN when the header does not say. */
  seconds: number;
  /** Start of the exposure as DATE-OBS says it (with its TIME-OBS or UT when it holds a date alone), for order; may be empty. */
  started: string;
  /** RA and DEC (or what stands for them), as written; empty when one is missing. */
  pointing: string;
  /** What a table with bits of the detector's layout cannot be told from. */
  geometry?: DetectorGeometry;
  /** Why there is none, in a sentence. */
  geometryProblem?: string;
  /** Of the readout: equal for frames that go together. */
  readout: string;
}

/** @throws FitsError when the file is not sound, or holds no image. */
export async function readFrameHeader(path: string, spectrograph?: Spectrograph, hdu?: number): Promise<FrameHeader> {
  const { nx, ny, header, primaryHeader, bitpix } = await imageHeader(path, hdu);
  const raw: RawImage = { name: basename(path), nx, ny, data: new Float32Array(0), header, primaryHeader, bitpix };
  const { kind, said } = exposureKind(raw);
  const text = (...keywords: string[]) => textOf(raw, keywords)?.value ?? "";
  const date = text("DATE-OBS", "DATE_OBS", "MJD-OBS", "JD");
  const pointing = [text("RA", "TELRA", "OBJRA"), text("DEC", "TELDEC", "OBJDEC")];
  return {
    path,
    name: raw.name,
    kind,
    kindFrom: said,
    object: text("OBJECT"),
    seconds: exposureSeconds(raw),
    started: /^\d{4}-\d\d-\d\d$/.test(date) ? `${date}T${text("TIME-OBS", "UT", "UTC")}` : date,
    pointing: pointing.includes("") ? "" : pointing.join(" "),
    ...readoutOf(raw, spectrograph),
  };
}

function readoutOf(raw: RawImage, spectrograph: Spectrograph | undefined) {
  try {
    const { geometry } = detectorLayout(raw, spectrograph, { gainMayBeMissing: true });
    return { geometry, readout: geometry.digest };
  } catch (error) {
    if (!(error instanceof DetectorError)) throw error;
    return { geometryProblem: error.message, readout: `${raw.nx} × ${raw.ny} pixels` };
  }
}
