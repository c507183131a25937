/** From a frame and its tramlines to spectra: background, a first pass that finds cosmic rays, their growth, and a second
 * pass over the columns that it touched. */
import type { Frame } from "../detector/frame.js";
import type { Precision } from "../kernels/banded.js";
import { type Kernels, loadKernels } from "../kernels/module.js";
import { Flag, MaskBit } from "../reference/bits.js";
import type { ExtractionOutput, ExtractionStart } from "../reference/extract.js";
import { checkGeometry } from "../tramlines/file.js";
import type { OneOff } from "../tramlines/oneOff.js";
import type { Shift } from "../tramlines/shift.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { adaptTramlines } from "./adapt.js";
import { noBackground } from "./background.js";
import { countRejected } from "./growth.js";
import type { FrameFit } from "./modelColumn.js";
import type { Adapted, ExtractionOptions } from "./options.js";
import { runPasses } from "./passes.js";
import { type ExtractionPlan, widened } from "./plan.js";
import { needsDouble } from "./precision.js";
import { type OpenFrame, openFrame } from "./settle.js";
import type { BackgroundFit } from "./smooth.js";
import type { Spectra } from "./spectra.js";

export interface Extraction {
  spectra: Spectra;
  /** Where the frame's light sat against the tramlines; null when not measured. */
  shift: Shift | null;
  /** How clearly the fibres' names fit; null when no shift was measured. */
  oneOff: OneOff | null;
  /** Whether the profile was refined on this frame. */
  refined: boolean;
  plan: ExtractionPlan;
  background: BackgroundFit | null;
  /** ny × nx, bits of MaskBit: cosmic, grown (and suspect, which were kept). */
  rejected: Uint8Array;
  nRejected: number;
  /** The fit behind the spectra, for whoever asks what its estimators do. */
  fit: FrameFit;
  /** ε as measured on this frame: share of the light nearby by which pixels miss the profiles beyond noise. */
  profileError: number;
  /** Numbers that the kernels reckoned with. */
  precision: Precision;
  warnings: string[];
}

/** Extracts every fibre of `frame` that `tramlines` hold.
 * @throws RangeError when the two come from different readout windows, or no fibre is lit. */
export async function extractFrame(
  given: Frame,
  tramlines: Tramlines,
  options: ExtractionOptions = {},
): Promise<Extraction> {
  checkGeometry(given, tramlines);
  const frame = withHits(given, options.knownHits);
  const kernels = await loadKernels();
  const adapted = options.adapted ?? adaptTramlines(kernels, frame, tramlines, options);
  const opened = runFrame(kernels, frame, adapted, options);
  const { bench, input, plan, background, profileError } = opened;
  const spectra = finishSpectra(bench.output, tramlines, input);
  options.knownHits?.forEach((hit, i) => {
    if (hit !== 0) bench.rejected[i] |= MaskBit.cosmic;
  });
  const nRejected = countRejected(bench.rejected);
  return {
    spectra,
    shift: adapted.shift,
    oneOff: adapted.oneOff,
    refined: adapted.refined,
    plan,
    background,
    rejected: bench.rejected,
    nRejected,
    fit: {
      input: { ...input, ...windowOf(widened(plan, adapted.tramlines)) },
      background: background ?? noBackground(),
      rows: plan.active,
      flux: bench.fitFlux,
    },
    profileError,
    precision: opened.precision,
    warnings: [...adapted.warnings, ...(background?.warnings ?? [])],
  };
}

/** All passes; once more in double precision when single turns out not to do. */
function runFrame(kernels: Kernels, frame: Frame, adapted: Adapted, options: ExtractionOptions): OpenFrame {
  const opened = openFrame(kernels, frame, adapted.tramlines, options, adapted.background);
  runPasses(opened.bench, opened.input, options.onProgress);
  if (options.precision !== "auto" || opened.precision === "f64" || !needsDouble(opened.bench.fitFlux)) return opened;
  opened.bench.release();
  return runFrame(kernels, frame, adapted, { ...options, precision: "f64" });
}

function windowOf({ halfWindow, wing, bandwidth }: ExtractionPlan) {
  return { halfWindow, wing, bandwidth };
}

/** The same frame with known hits in its mask, so that every step that looks at the frame passes them over.
 * @throws RangeError when `hits` is of another size. */
function withHits(frame: Frame, hits: Uint8Array | undefined): Frame {
  if (hits === undefined) return frame;
  if (hits.length !== frame.mask.length) {
    throw new RangeError(
      `${frame.name}: ${hits.length} pixels are marked as hit or not, but the frame has ${frame.mask.length}; give one number a pixel.`,
    );
  }
  return { ...frame, mask: frame.mask.map((bits, i) => (hits[i] === 0 ? bits : bits | MaskBit.cosmic)) };
}

function finishSpectra(output: ExtractionOutput, tramlines: Tramlines, input: ExtractionStart): Spectra {
  const { nFibre, nx } = tramlines;
  tramlines.state.forEach((state, k) => {
    if (state === "dead") output.flags.fill(Flag.dead, k * nx, (k + 1) * nx);
  });
  return {
    ...output,
    nFibre,
    nx,
    method: input.method,
    crosstalkCorrected: input.crosstalk || input.method === "joint",
  };
}
