/** Tramlines: where each fibre's light runs over the detector, and how it spreads across its line. */

import type { ShapeTable } from "../reference/shape.js";

export type FibreState = "lit" | "dim" | "dead";

/** Gaussian integrated over pixels; its width follows x as a Legendre series of its own for each fibre. */
export interface GaussianProfile {
  kind: "gaussian";
  /** nFibre × (widthDegree + 1): σ(x), pixels. */
  sigma: Float64Array;
  widthDegree: number;
  /** The profile's own relative error ε: how far data may stray from flux × profile before noise. */
  relativeError: number;
}

/** What earlier frames said of a shape: its best coefficients, and how firmly they stand (second derivatives of χ²/2). */
export interface KnownShape {
  /** nShape */
  best: Float64Array;
  /** nShape × nShape; column ≤ row counts. */
  information: Float64Array;
}

/** Any form, from a table; its widths stretch it. */
export interface ShapeProfile {
  /** What the form was made of: Gauss–Hermite functions and exponential wings, or splines. */
  kind: "hermite" | "empirical";
  /** nFibre × (widthDegree + 1): σ(x), pixels. */
  sigma: Float64Array;
  widthDegree: number;
  /** The profile's own relative error ε. */
  relativeError: number;
  shape: ShapeTable;
  /** The flat's word on the shape, for frames that refine it. */
  known: KnownShape;
}

export type Profile = GaussianProfile | ShapeProfile;

export interface Tramlines {
  nx: number;
  ny: number;
  nFibre: number;
  degree: number;
  /** nFibre, from 1 in slit order; a fibre is never renumbered, dead or not. */
  fibre: Int32Array;
  state: FibreState[];
  /** nFibre, from 1. */
  block: Int32Array;
  /** nFibre × (degree + 1): y(x) in pixels, x ∈ [0, nx − 1] mapped to [−1, 1]. */
  legendre: Float64Array;
  /** nFibre: first and last column in which the fibre was seen. */
  seenFrom: Int32Array;
  seenTo: Int32Array;
  /** nFibre: scatter of the measured centres about y(x), pixels; NaN for a fibre filled from its neighbours. */
  rms: Float64Array;
  /** nFibre: centres kept in the fit. */
  nPoint: Int32Array;
  profile: Profile;
  geometryDigest: string;
}

/** Standard error of each tramline's y(x), root mean square over the columns that it was seen in: [nFibre] pixels. The fit of
 * n places that scatter by rms with p coefficients has the variance rms² · p / n on the average of its points (trace of
 * the hat matrix), rms taken with n − p degrees of freedom. NaN for a fibre filled from its neighbours. What all fibres
 * share, a flat that moved or a profile whose centroid is off, is not in it; on simulated flats the true scatter was found a
 * sixth larger. */
export function tramlineErrors({ nFibre, degree, rms, nPoint }: Tramlines): Float64Array {
  const p = degree + 1;
  return Float64Array.from({ length: nFibre }, (_, k) =>
    nPoint[k] > p ? rms[k] * Math.sqrt(p / (nPoint[k] - p)) : Number.NaN,
  );
}
