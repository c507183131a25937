/** Which numbers the kernels reckon with. Single precision is twice as fast, and what it costs was measured against double
 * (test/precision.test.ts, profiles of FWHM 2.4 px): with fibres of 1e5 e⁻ beside others of 10 e⁻ at most 1.2e-4 σ at a pitch of
 * 2.5 px and more, 1.5e-4 σ at 2 px, 5e-4 σ at 1.5 px, and 1.5e-2 σ at 1 px, where fibres can hardly be told apart; it grows with the
 * root of the brightest flux. So it is left where it would cost more than about 1e-3 σ. */
import type { Precision } from "../kernels/banded.js";
import type { ExtractionPlan } from "./plan.js";

/** "auto": f32, or f64 where that is needed. */
export type PrecisionChoice = Precision | "auto";

/** Smallest pitch, in FWHM of the widest fibre, at which single precision serves. */
const leastPitch = 0.75;
/** e⁻ per dispersion pixel up to which it serves. */
const brightestFlux = 3e6;
/** FWHM of a Gaussian in σ, 2·√(2 ln 2). */
const fwhmOfSigma = 2.3548200450309493;

/** What to begin with. */
export function choosePrecision(choice: PrecisionChoice, { smallestPitch, widestSigma }: ExtractionPlan): Precision {
  if (choice !== "auto") return choice;
  return smallestPitch < leastPitch * fwhmOfSigma * widestSigma ? "f64" : "f32";
}

/** Whether fluxes found in single precision, e⁻, are too bright for it. */
export function needsDouble(flux: Float32Array | Float64Array): boolean {
  for (let i = 0; i < flux.length; i++) if (flux[i] > brightestFlux) return true;
  return false;
}
