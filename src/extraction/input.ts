/** From a frame, its tramlines and the options to what the kernel, and its reference, take. */
import type { Frame } from "../detector/frame.js";
import type { ExtractionStart, SmoothBackground } from "../reference/extract.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { noBackground } from "./background.js";
import type { ExtractionOptions } from "./options.js";
import type { ExtractionPlan } from "./plan.js";

/** What the kernel, and its reference, need for this frame. */
export function extractionInput(
  frame: Frame,
  tramlines: Tramlines,
  plan: ExtractionPlan,
  options: ExtractionOptions,
  background: SmoothBackground = noBackground(),
): ExtractionStart {
  const { active } = plan;
  const { profile, degree } = tramlines;
  const method = options.method ?? "joint";
  const rejecting = options.cosmicRays !== false;
  return {
    nx: frame.nx,
    ny: frame.ny,
    nFibre: active.length,
    halfWindow: plan.halfWindow,
    wing: plan.wing,
    blockColumns: plan.blockColumns,
    trace: pickRows(tramlines.legendre, degree + 1, active),
    nTrace: degree + 1,
    width: pickRows(profile.sigma, profile.widthDegree + 1, active),
    nWidth: profile.widthDegree + 1,
    ...(profile.kind === "gaussian" ? {} : { shape: profile.shape }),
    electrons: frame.electrons,
    mask: frame.mask,
    noise: frame.noise,
    background,
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
  };
}

function pickRows(rows: Float64Array, length: number, which: number[]): Float64Array {
  const picked = new Float64Array(which.length * length);
  which.forEach((k, i) => {
    picked.set(rows.subarray(k * length, (k + 1) * length), i * length);
  });
  return picked;
}
