/** From a frame and its tramlines to spectra: background, a first pass that finds cosmic rays, their growth, and a second
 * pass over the columns that it touched. */
import type { Frame } from "../detector/frame.js";
import type { Precision } from "../kernels/banded.js";
import { loadKernels } from "../kernels/module.js";
import { Flag, MaskBit } from "../reference/bits.js";
import type { ExtractionInput, ExtractionOutput, Method } from "../reference/extract.js";
import { checkGeometry } from "../tramlines/file.js";
import type { OneOff } from "../tramlines/oneOff.js";
import type { Shift } from "../tramlines/shift.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { type Adapted, adaptTramlines } from "./adapt.js";
import { type BackgroundFit, fitBackground, noBackground } from "./background.js";
import type { FrameFit } from "./modelColumn.js";
import { runPasses } from "./passes.js";
import type { ExtractionPlan } from "./plan.js";
import { openFrame } from "./settle.js";
import type { Spectra } from "./spectra.js";

export interface ExtractionOptions {
  /** Default joint. */
  method?: Method;
  /** Give back to each fibre what boxcar or optimal let its neighbours take; joint always does. Default true. */
  crosstalk?: boolean;
  /** Type of the kernels' numbers. Default f64; f32 is faster and serves well-separated fibres. */
  precision?: Precision;
  /** Reject cosmic rays. Default true. */
  cosmicRays?: boolean;
  /** Excess over noise, in σ, from which on a pixel is rejected. Default 5. */
  kappa?: number;
  /** The same for pixels beside a rejected one. Default 2.5. */
  growKappa?: number;
  /** Half of the boxcar's aperture, pixels. Default half of the smallest pitch, at most the profile's reach. */
  halfAperture?: number;
  /** Take off a smooth background seen between the fibres. Default true. */
  background?: boolean;
  /** What `adaptTramlines` found for this very frame and these tramlines: measured once for several extractions. */
  adapted?: Adapted;
  /** Measure where the frame's light sits against the tramlines, and extract it there. Default true. */
  shift?: boolean;
  /** Refuse a frame whose light does not tell that its fibres are named rightly. Default true. Without it a frame that moved
   * by one fibre since the flat gives every spectrum another fibre's number, in silence. */
  checkNames?: boolean;
  /** Refine a measured profile on the frame itself. Default true. */
  refine?: boolean;
  /** ny × nx, not 0 where a cosmic ray is known to have hit: those pixels are left out from the start. */
  knownHits?: Uint8Array;
  /** Called with the share of columns done, 0 to 1. */
  onProgress?: (share: number) => void;
}

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
  const { bench, input, plan, background, profileError } = openFrame(kernels, frame, adapted.tramlines, options);
  runPasses(bench, input, options.onProgress);
  const spectra = finishSpectra(bench.output, tramlines, input);
  options.knownHits?.forEach((hit, i) => {
    if (hit !== 0) bench.rejected[i] |= MaskBit.cosmic;
  });
  const nRejected = bench.rejected.reduce((n, bits) => n + (bits & (MaskBit.cosmic | MaskBit.grown) ? 1 : 0), 0);
  return {
    spectra,
    shift: adapted.shift,
    oneOff: adapted.oneOff,
    refined: adapted.refined,
    plan,
    background,
    rejected: bench.rejected,
    nRejected,
    fit: { input, background: background ?? noBackground(), model: bench.model },
    profileError,
    warnings: [...adapted.warnings, ...(background?.warnings ?? [])],
  };
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

/** What the kernel, and its reference, need for this frame. */
export function extractionInput(
  frame: Frame,
  tramlines: Tramlines,
  plan: ExtractionPlan,
  options: ExtractionOptions,
): ExtractionInput {
  const { active } = plan;
  const { profile, degree } = tramlines;
  const method = options.method ?? "joint";
  const rejecting = options.cosmicRays !== false;
  return {
    nx: frame.nx,
    ny: frame.ny,
    nFibre: active.length,
    halfWindow: plan.halfWindow,
    blockColumns: plan.blockColumns,
    trace: pickRows(tramlines.legendre, degree + 1, active),
    nTrace: degree + 1,
    width: pickRows(profile.sigma, profile.widthDegree + 1, active),
    nWidth: profile.widthDegree + 1,
    ...(profile.kind === "gaussian" ? {} : { shape: profile.shape }),
    electrons: frame.electrons,
    mask: frame.mask,
    noise: frame.noise,
    background: options.background === false ? noBackground() : fitBackground(frame, tramlines),
    seen: Int32Array.from(active.flatMap((k) => [tramlines.seenFrom[k], tramlines.seenTo[k]])),
    bandwidth: plan.bandwidth,
    method,
    crosstalk: method !== "joint" && options.crosstalk !== false,
    halfAperture: options.halfAperture ?? Math.min(plan.smallestPitch / 2, plan.halfWindow),
    profileError: profile.relativeError,
    kappa: rejecting ? (options.kappa ?? 5) : 0,
    growKappa: options.growKappa ?? 2.5,
    minRounds: 2,
    maxRounds: 8,
    rejected: new Uint8Array(frame.nx * frame.ny),
  };
}

function finishSpectra(output: ExtractionOutput, tramlines: Tramlines, input: ExtractionInput): Spectra {
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

function pickRows(rows: Float64Array, length: number, which: number[]): Float64Array {
  const picked = new Float64Array(which.length * length);
  which.forEach((k, i) => {
    picked.set(rows.subarray(k * length, (k + 1) * length), i * length);
  });
  return picked;
}
