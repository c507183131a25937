/** Any profile model as one table of a cumulative shape, for work that needs slopes too. */
import type { Kernels } from "../kernels/module.js";
import { nShapeTerm, type ShapeTable } from "../reference/shape.js";
import type { Lines } from "../reference/shapeProfiles.js";
import type { Profile, Tramlines } from "./tramlines.js";

const reachSigma = 8;
const pointsPerSigma = 32;
/** Half of the distance over which a Gaussian's slope is taken, σ: error of 1e-7 of the peak. */
const slopeStep = 5e-4;

/** @returns the profile's own table, or a Gaussian's, of width 1 px at the reference. */
export function profileTable(kernels: Kernels, profile: Profile): ShapeTable {
  if (profile.kind !== "gaussian") return profile.shape;
  const { erf } = kernels.workbench(0).call;
  const cumulative = (v: number) => 0.5 + 0.5 * erf(v * Math.SQRT1_2);
  const n = 2 * reachSigma * pointsPerSigma + 1;
  const values = new Float64Array(n * 2 * nShapeTerm);
  for (let i = 0; i < n; i++) {
    const v = -reachSigma + i / pointsPerSigma;
    values[i * 2 * nShapeTerm] = cumulative(v);
    values[i * 2 * nShapeTerm + nShapeTerm] = (cumulative(v + slopeStep) - cumulative(v - slopeStep)) / (2 * slopeStep);
  }
  return {
    start: -reachSigma,
    step: 1 / pointsPerSigma,
    n,
    values,
    referenceWidth: 1,
    centroid: new Float64Array(nShapeTerm),
  };
}

/** Series of the fibres in `which`, in that order. */
export function linesOf(tramlines: Tramlines, which: number[]): Lines {
  const nTrace = tramlines.degree + 1;
  const nWidth = tramlines.profile.widthDegree + 1;
  const lines: Lines = {
    nx: tramlines.nx,
    ny: tramlines.ny,
    nFibre: which.length,
    trace: new Float64Array(which.length * nTrace),
    nTrace,
    width: new Float64Array(which.length * nWidth),
    nWidth,
  };
  which.forEach((k, i) => {
    lines.trace.set(tramlines.legendre.subarray(k * nTrace, (k + 1) * nTrace), i * nTrace);
    lines.width.set(tramlines.profile.sigma.subarray(k * nWidth, (k + 1) * nWidth), i * nWidth);
  });
  return lines;
}

/** Fibres that carry light, as indices into the tramlines. */
export function activeFibres(tramlines: Tramlines): number[] {
  return tramlines.state.flatMap((state, k) => (state === "dead" ? [] : [k]));
}
