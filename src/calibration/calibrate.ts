/** From raw spectra to calibrated ones, in one place: wavelengths, throughput, sky.
 *
 *     f = F/T − S(λ)
 *     var f = (var F + f_T² var T) / T² + var S,   f_T = F/T
 *
 * A sky fibre's own samples are part of S, which follows their noise: var f = (var F)/T² − var S for those (the covariance of a
 * sample with the fit is the fit's variance there, when weights are inverse variances). The error of S is common to all fibres at
 * one wavelength: NEIGHBOUR_COV has that of next neighbours, fibres further apart share it too. */
import { Flag, type Spectra } from "../extraction/spectra.js";
import { splineCovariances } from "./bspline.js";
import { CalibrationError } from "./errors.js";
import type { Medium } from "./medium.js";
import { fitSky, type Sky } from "./sky.js";
import { type SkyScales, scaleSky } from "./skyScale.js";
import type { Throughput } from "./throughput.js";
import { type WavelengthSolution, wavelengthImage } from "./wavelengths.js";
import { type FrameZeroPoint, measureZeroPoint } from "./zeroPoint.js";

export interface SpectraCalibration {
  solution: WavelengthSolution;
  /** Where the light lies against the arc's; measured on sky lines when absent. null: take the arc's wavelengths as they are. */
  zeroPoint?: FrameZeroPoint | null;
  throughput?: Throughput;
  /** Rows, from 0, of fibres that see only sky; absent: the sky is left on. */
  skyFibres?: number[];
  /** Scale the sky's lines in each fibre, group by group. */
  scaleLines?: boolean;
  /** What to call the frame in messages. */
  name?: string;
}

export interface Calibrated {
  /** In light of a fibre of throughput 1, without the sky; its flags have `noWavelength` where wavelength, throughput or sky is
   * not known, and flux is NaN there. */
  spectra: Spectra;
  /** nFibre × nx, Å. */
  wavelengths: Float64Array;
  medium: Medium;
  /** null: not measured. */
  zeroPoint: FrameZeroPoint | null;
  throughput: Throughput | null;
  sky: Sky | null;
  /** Where lines were scaled: how far, for each fibre and group of lines. */
  scaled: SkyScales | null;
  warnings: string[];
}

/** @throws CalibrationError when solution or throughput belong to another readout, or the sky cannot be made. */
export function calibrateSpectra(spectra: Spectra, geometryDigest: string, input: SpectraCalibration): Calibrated {
  const { solution, throughput = null, skyFibres, scaleLines = false, name = "the frame" } = input;
  requireReadout(name, spectra, geometryDigest, "wavelengths", solution, "reduce an arc");
  if (throughput !== null) {
    requireReadout(name, spectra, geometryDigest, "throughput", throughput, "measure it on a twilight or fibre flat");
  }
  const zeroPoint = input.zeroPoint === undefined ? measureZeroPoint(spectra, solution) : input.zeroPoint;
  const wavelengths = wavelengthImage(solution, zeroPoint?.pixels ?? 0);
  const relative = throughput?.relative ?? null;
  const sky = skyFibres === undefined ? null : fitSky({ spectra, wavelengths, relative, skyFibres }, name);
  const flat = applied(spectra, wavelengths, throughput, sky);
  const scaled =
    sky === null || !scaleLines
      ? null
      : scaleSky(flat, wavelengths, solution.medium, sky.spline.fit, sky.values, sky.lines);
  if (sky !== null && scaled !== null) takeOffScaled(flat, sky, scaled);
  return {
    spectra: flat,
    ...{ wavelengths, medium: solution.medium, zeroPoint, throughput, sky, scaled },
    warnings: [
      ...(zeroPoint?.warnings ?? []).map((sentence) => `${name}: ${sentence}`),
      ...(sky === null ? [] : skyWarnings(sky, name)),
    ],
  };
}

/** In place: what the lines are more, or less, in each fibre. */
function takeOffScaled({ flux, variance }: Spectra, sky: Sky, { extra, variance: uncertain }: SkyScales): void {
  for (let i = 0; i < flux.length; i++) {
    flux[i] -= extra[i];
    variance[i] += uncertain[i];
    sky.values[i] += extra[i];
    sky.variance[i] += uncertain[i];
  }
}

/** @throws CalibrationError when what is given belongs to another readout than the spectra. `what` and `remedy`: parts of the
 * sentence. */
export function requireReadout(
  name: string,
  { nFibre, nx }: { nFibre: number; nx: number },
  digest: string,
  what: string,
  theirs: { nFibre: number; nx: number; geometryDigest: string },
  remedy: string,
): void {
  const sameSize = nFibre === theirs.nFibre && nx === theirs.nx;
  if (sameSize && digest === theirs.geometryDigest) return;
  const other = sameSize
    ? "another readout window (sections, axis or binning differ)"
    : `${theirs.nFibre} fibres × ${theirs.nx} columns`;
  throw new CalibrationError(
    `${name}: ${nFibre} fibres × ${nx} columns, but the ${what} given belong to ${other}; ${remedy} of the same readout window, with the same tramlines.`,
  );
}

function applied(raw: Spectra, wavelengths: Float64Array, throughput: Throughput | null, sky: Sky | null): Spectra {
  const { nFibre, nx } = raw;
  const out: Spectra = {
    ...raw,
    flux: raw.flux.slice(),
    variance: raw.variance.slice(),
    neighbourCovariance: raw.neighbourCovariance.slice(),
    flags: raw.flags.slice(),
  };
  for (let i = 0; i < nFibre * nx; i++) {
    const t = throughput === null ? 1 : throughput.relative[i];
    const tVariance = throughput === null ? 0 : throughput.variance[i];
    const light = raw.flux[i] / t;
    out.flux[i] = light - (sky === null ? 0 : sky.values[i]);
    const own = (raw.variance[i] + light * light * tVariance) / (t * t);
    out.variance[i] = sky === null ? own : withSky(own, raw.variance[i] / (t * t), sky, i);
    const known = Number.isFinite(wavelengths[i]) && t > 0 && (sky === null || Number.isFinite(sky.values[i]));
    if (known) continue;
    out.flux[i] = Number.NaN;
    out.variance[i] = Number.NaN;
    out.flags[i] |= Flag.noWavelength;
  }
  for (let k = 0; k < nFibre; k++) neighbours(out, wavelengths, throughput, sky, k);
  return out;
}

/** `noise`: the sample's own, which a fit that it took part in follows. */
function withSky(own: number, noise: number, { variance, ownShare }: Sky, i: number): number {
  // No sample is known better than to a thousandth of its noise by taking itself off.
  return Math.max(own + (1 - 2 * ownShare[i]) * variance[i], 1e-3 * noise);
}

/** Covariance of row k with the next, in place: the extraction's, scaled, and what the sky that was taken off has in common. */
function neighbours(
  out: Spectra,
  wavelengths: Float64Array,
  throughput: Throughput | null,
  sky: Sky | null,
  k: number,
): void {
  const { nx, nFibre, neighbourCovariance } = out;
  if (k + 1 === nFibre) return;
  const [here, next] = [k * nx, (k + 1) * nx];
  const common =
    sky === null
      ? null
      : splineCovariances(sky.spline.fit, wavelengths.subarray(here, next), wavelengths.subarray(next, next + nx));
  for (let x = 0; x < nx; x++) {
    const t = throughput === null ? 1 : throughput.relative[here + x] * throughput.relative[next + x];
    // Of a sky fibre's sample with the sky read elsewhere, the covariance is the sky's own; two such samples take it off twice.
    const nOwn = sky === null ? 0 : sky.ownShare[here + x] + sky.ownShare[next + x];
    const shared = common === null ? 0 : (1 - nOwn) * common[x];
    neighbourCovariance[here + x] = neighbourCovariance[here + x] / t + shared;
  }
}

function skyWarnings({ leftOut, checks }: Sky, name: string): string[] {
  if (leftOut.length === 0) return [];
  const each = leftOut.map(
    ({ fibre, residual }) => `${fibre + 1} (${residual > 0 ? "+" : "−"}${(100 * Math.abs(residual)).toFixed(1)} %)`,
  );
  const [see, were] = leftOut.length === 1 ? ["does not see", "was"] : ["do not see", "were"];
  return [
    `${name}: ${leftOut.length} of ${checks.length} sky fibres ${see} the sky of the others and ${were} left out: ${each.join(", ")}; an object lies in it, or its throughput is not as measured.`,
  ];
}
