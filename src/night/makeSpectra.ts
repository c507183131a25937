/** One frame to its spectra, as they are extracted: objects, arcs, and evenly lit ones. */
import { basename } from "node:path";
import { correctFrame } from "../detector/correct.js";
import type { Frame } from "../detector/frame.js";
import { type Extraction, extractFrame } from "../extraction/extract.js";
import { targetsHdu } from "../extraction/extraHdus.js";
import { writeSpectra } from "../extraction/file.js";
import { type Spectra, UNUSABLE } from "../extraction/spectra.js";
import { neglectedShare, sumFibres, type Target } from "../extraction/targets.js";
import type { OutputHdu } from "../fits/encode.js";
import { readImage } from "../fits/image.js";
import { oneOfEach } from "../oneOfEach.js";
import { medianInPlace } from "../reference/median.js";
import { summariseSpectra } from "../report/summary.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { correctionLines, openCorrection, openTramlines } from "./correction.js";
import type { Wanted } from "./plan.js";
import type { Facts, Job } from "./task.js";

type Method = Pick<Wanted, "method" | "crosstalk" | "precision" | "cosmicRays" | "refine" | "trustNames">;

interface Options extends Method {
  version: string;
  role: "arc" | "even light" | "object";
  halfAperture: number | null;
}

export async function makeSpectra(job: Job): Promise<Facts> {
  const options = job.options as unknown as Options;
  const [{ path }] = job.inputs.frame;
  const correction = await openCorrection(job);
  const raw = await readImage(path, { hdu: correction.hdu, forFrame: true });
  correction.inputs.push({ name: raw.name, checksum: raw.checksum });
  const frame = correctFrame(raw, correction.calibrations, correction.spectrograph, {
    role: options.role === "arc" ? "arc" : "science",
  });
  const tramlines = await openTramlines(job, correction);
  const { method, crosstalk, precision, cosmicRays, refine, halfAperture, trustNames } = options;
  const extraction = await extractFrame(frame, tramlines, {
    ...{ method, crosstalk, precision, cosmicRays, refine, checkNames: !trustNames },
    ...(halfAperture === null ? {} : { halfAperture }),
  });
  const targets = options.role === "object" ? correction.spectrograph?.slit?.targets : undefined;
  await writeSpectra(job.products[0], extraction, frame, tramlines, {
    version: options.version,
    options: [...methodLines(options, extraction), "tramlines tramlines.fits", ...correctionLines(job)],
    inputs: correction.inputs,
    sky: correction.spectrograph?.slit?.sky,
    extra: targets === undefined ? [] : [summed(extraction, targets)],
  });
  return { frame: basename(path), ...spectraFacts(frame, tramlines, extraction) };
}

function summed(extraction: Extraction, targets: Target[]): OutputHdu {
  const sums = sumFibres(extraction.spectra, targets);
  return targetsHdu(sums, neglectedShare(extraction, sums));
}

function methodLines(options: Options, { precision }: Extraction): string[] {
  const onOff = (value: boolean) => (value ? "on" : "off");
  const { method, crosstalk, cosmicRays, refine, halfAperture, trustNames } = options;
  return [
    `method ${method}`,
    ...(method === "joint" ? [] : [`crosstalk ${onOff(crosstalk)}`]),
    `precision ${precision}`,
    `cosmic-rays ${onOff(cosmicRays)}`,
    `refine ${onOff(refine)}`,
    ...(halfAperture === null ? [] : [`half-aperture ${halfAperture}`]),
    ...(trustNames ? ["trust-names"] : []),
  ];
}

function spectraFacts(frame: Frame, tramlines: Tramlines, extraction: Extraction): Facts {
  const { spectra, shift } = extraction;
  const { nPoint, nUsable, signalToNoise } = summariseSpectra(spectra, tramlines);
  return {
    exposureSeconds: finite(frame.exposureSeconds),
    method: spectra.method,
    medianSignalToNoise: finite(signalToNoise.median),
    medianElectrons: finite(medianFlux(spectra)),
    shiftPixels: shift === null ? null : shift.coefficients[0],
    shiftError: shift === null ? null : finite(shift.errors[0]),
    rejectedPixels: extraction.nRejected,
    usableShare: nUsable / nPoint,
    profileError: finite(extraction.profileError),
    assumptions: oneOfEach(frame.assumptions),
    warnings: oneOfEach([...frame.warnings, ...extraction.warnings]),
  };
}

/** e⁻ per column: median over the usable points of all fibres. */
function medianFlux({ flux, flags }: Spectra): number {
  const values = new Float64Array(flux.length);
  let n = 0;
  for (let i = 0; i < flux.length; i++) {
    if ((flags[i] & UNUSABLE) === 0 && Number.isFinite(flux[i])) values[n++] = flux[i];
  }
  return medianInPlace(values, n);
}

/** JSON has no NaN. */
function finite(value: number): number | null {
  return Number.isFinite(value) ? value : null;
}
