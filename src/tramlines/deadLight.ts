/** Light in a science frame where the flat had none: a fibre that is held for dead takes no part in any fit, so its light goes
 * to its neighbours and to the background without a word. Here dead positions are fitted like fibres, together with all
 * lit ones, in some columns of the frame. */
import type { Frame } from "../detector/frame.js";
import { type ColumnFits, type ColumnSample, groupColumns } from "../kernels/columnFit.js";
import type { Kernels } from "../kernels/module.js";
import type { SmoothBackground } from "../reference/extract.js";
import { legendreArgument, legendreValue } from "../reference/legendre.js";
import { medianInPlace } from "../reference/median.js";
import type { Lines } from "../reference/shapeProfiles.js";
import { everyGroup, type SampleSize, sampleColumns } from "./columnSample.js";
import { TraceError } from "./errors.js";
import { fibres } from "./name.js";
import { linesOf } from "./profileTable.js";
import type { Tramlines } from "./tramlines.js";

export interface DeadLight {
  /** From 0, in slit order. */
  index: number;
  /** Median light per column, e⁻, and its standard error from noise alone. */
  flux: number;
  error: number;
  /** Median light of the fibres up to two positions away, together, e⁻. */
  around: number;
  /** Whether noise, wings and background leave no other reading than a fibre that shines. */
  shines: boolean;
}

/** Columns looked at; half of them in a slit of hundreds of fibres. */
const looked: SampleSize = { nGroup: 12, together: 2 };
const manyFibres = 400;
/** Of the fit, as in shift.ts. */
const fitError = 0.003;
/** Columns without which a position is not judged. */
const leastColumns = 12;
const wingReach = 2;
const certainSigma = 5;
/** Share of the light around that wings beyond the profile model may leave at a dead position, at least; and in units of
 * the profile's own error. A Gaussian on light with wings of a few per cent (ε = 0.025) leaves 0.22 ε, profiles with wings
 * some 0.1 %. */
const wingShare = 0.004;
const wingErrors = 0.5;
/** Share of the fainter lit fibres' light (lower quartile) below which a position is not called lit: what an imperfect
 * background leaves, or a fibre that is all but dead, in the flat as here. */
const leastShare = 0.15;
/** e⁻ per column: what a background wrong by a few e⁻ per pixel leaves. */
const leastElectrons = 15;
/** Standard error of a median over that of a mean, normal errors: √(π/2). */
const medianPrice = 1.2533;
/** Share of the slit positions from which on dead ones with light are no accident. */
const ruinousShare = 0.05;

/** Light at every dead position on the detector. `tramlines`: moved to the frame's light; `background`: fitted with light
 * allowed at dead positions, or theirs would be taken for it. `sample`: of this frame. */
export function measureDeadLight(
  kernels: Kernels,
  frame: Frame,
  tramlines: Tramlines,
  background: SmoothBackground,
  sample = sampleColumns(kernels, frame, tramlines, looked),
): DeadLight[] {
  const { state, nFibre } = tramlines;
  if (!state.includes("dead")) return [];
  const lines = linesOf(tramlines, Array.from(state.keys()));
  const tells = Uint8Array.from(state, (one) => (one === "dead" ? 0 : 1));
  const groups = everyGroup(sample, nFibre < manyFibres ? 1 : 2);
  const fits = sample.fit(lines, { groups, background, tells, profileError: fitError });
  const seen = Array.from({ length: nFibre }, (_, k) => lightOf(k, sample, lines, fits));
  const lit = seen.flatMap(({ flux }, k) => (state[k] !== "dead" && !Number.isNaN(flux) ? [flux] : []));
  lit.sort((a, b) => a - b);
  const least = Math.max(leastElectrons, leastShare * (lit[lit.length >> 2] ?? 0));
  const wings = Math.max(wingShare, wingErrors * tramlines.profile.relativeError);
  return state.flatMap((one, index) => {
    const { flux, error, n } = seen[index];
    if (one !== "dead" || n < leastColumns) return [];
    let around = 0;
    for (let k = Math.max(0, index - wingReach); k <= Math.min(nFibre - 1, index + wingReach); k++) {
      if (k !== index && state[k] !== "dead") around += Math.max(0, seen[k].flux || 0);
    }
    return [{ index, flux, error, around, shines: flux - wings * around > certainSigma * error && flux > least }];
  });
}

/** Median light of fibre k over the columns that tell of it, its standard error, and how many columns do. */
function lightOf(
  k: number,
  { nx, ny, firstColumns }: ColumnSample,
  { nFibre, trace, nTrace }: Lines,
  fits: ColumnFits,
): { flux: number; error: number; n: number } {
  const most = fits.groups.length * groupColumns;
  const [fluxes, errors] = [new Float64Array(most), new Float64Array(most)];
  let n = 0;
  for (const g of fits.groups) {
    const t = legendreArgument(firstColumns[g] + (groupColumns - 1) / 2, nx);
    const y = legendreValue(trace, t, k * nTrace, nTrace);
    // A tramline off the frame has the far wing alone to tell of it.
    if (!(y > 0 && y < ny - 1)) continue;
    for (let at = (g * nFibre + k) * groupColumns; at < (g * nFibre + k + 1) * groupColumns; at++) {
      if (!(fits.fluxVariance[at] > 0)) continue;
      fluxes[n] = fits.flux[at];
      errors[n++] = Math.sqrt(fits.fluxVariance[at]);
    }
  }
  const flux = medianInPlace(fluxes, n);
  return { flux, error: (medianPrice * medianInPlace(errors, n)) / Math.sqrt(n), n };
}

/** One sentence that names the fibres, or none.
 * @throws TraceError when over 5 % of the slit positions shine that should be dark. */
export function deadLightWarnings(frame: Frame, found: DeadLight[], nFibre: number): string[] {
  const shining = found.filter(({ shines }) => shines);
  if (shining.length === 0) return [];
  const level = shining.map(({ flux }) => flux.toFixed(0)).slice(0, 8);
  const more = shining.length > level.length ? ", …" : "";
  const finding =
    `${frame.name}: light in ${fibres(shining.map(({ index }) => index))} (${level.join(", ")}${more} e⁻ per column), dead in the ` +
    "flat that was traced";
  if (shining.length > ruinousShare * nFibre) {
    throw new TraceError(
      `${finding}; no spectrum or background holds with so many fibres left out, so trace a flat in which every lit fibre shines.`,
    );
  }
  return [`${finding}; it gets no spectrum and spoils its neighbours', so trace a flat in which it shines.`];
}
