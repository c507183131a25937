/** The smooth background of a frame, fitted in turns together with the fibres (tramlines/backgroundTurn.ts). Bright light tells
 * less of it, by the profile's own error: what profiles miss is smooth too. */
import type { Frame } from "../detector/frame.js";
import { type ColumnSample, groupColumns } from "../kernels/columnFit.js";
import type { Kernels } from "../kernels/module.js";
import type { SmoothBackground } from "../reference/extract.js";
import { legendreArgument, legendreValue } from "../reference/legendre.js";
import { backgroundTurn, type ToldBackground } from "../tramlines/backgroundTurn.js";
import { everyGroup, sampleColumns } from "../tramlines/columnSample.js";
import { activeFibres, linesOf } from "../tramlines/profileTable.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { noBackground } from "./background.js";

/** Fluxes that the surface is told by, as many as the frame holds: some 0.2 e⁻ per pixel of standard error with 800 fibres 5 px
 * apart and 3 e⁻ of read noise. */
const fibreColumns = 200_000;
/** Groups that the first turns look at, at the most. */
const startGroups = 12;
/** σ to which profiles with wings are followed, as in an extraction: plan.ts. */
const wingReach = 13;
/** Share of the light nearby by which profiles may miss, at the least, and in units of their own error. */
const leastError = 0.1;
const ownErrors = 5;
const clipSigma = 5;
/** e⁻ per pixel: a standard error beyond which the fibres leave nothing to tell a background by. */
const uselessError = 2;

export interface BackgroundFit extends SmoothBackground {
  /** Standard error from noise alone, root mean square over the frame, e⁻ per pixel; NaN without a background. */
  error: number;
  warnings: string[];
}

/** Fits the background of `frame`. `start`: what an earlier fit found. */
export function measureBackground(
  kernels: Kernels,
  frame: Frame,
  tramlines: Tramlines,
  start?: SmoothBackground,
): BackgroundFit {
  const active = activeFibres(tramlines);
  const nGroup = Math.max(startGroups, Math.ceil(fibreColumns / groupColumns / active.length));
  const sample = sampleColumns(kernels, frame, tramlines, { nGroup, together: 4 }, wingReach, frame.memory);
  leaveOutBesideLost(sample, tramlines, active);
  const first = start ?? startBackground(sample, tramlines, active);
  const fit = turn(sample, tramlines, active, first, 1, clipSigma);
  const error = fit.error();
  sample.release();
  if (error < uselessError) return { ...fit, error, warnings: [] };
  const warning = `${frame.name}: the fibres leave too little room to tell scattered light from theirs, so none is taken off; faint fibres may hold some.`;
  return { ...noBackground(), error: Number.NaN, warnings: [warning] };
}

/** Takes the rows out of the sample, column by column, into which a fibre spills whose own core is lost: its flux cannot be told
 * there, and its wings would pass for background. */
function leaveOutBesideLost(
  { nx, ny, nGroup, firstColumns, light }: ColumnSample,
  tramlines: Tramlines,
  active: number[],
) {
  const { legendre, degree, profile } = tramlines;
  const [nTrace, nWidth] = [degree + 1, profile.widthDegree + 1];
  const value = (g: number, c: number, y: number) => light[(g * ny + y) * groupColumns + c];
  for (let g = 0; g < nGroup; g++) {
    for (let c = 0; c < groupColumns && firstColumns[g] + c < nx; c++) {
      const t = legendreArgument(firstColumns[g] + c, nx);
      const lost: [from: number, to: number][] = [];
      for (const k of active) {
        const y = legendreValue(legendre, t, k * nTrace, nTrace);
        const sigma = legendreValue(profile.sigma, t, k * nWidth, nWidth);
        if (
          isLost(Math.max(0, Math.round(y - sigma)), Math.min(ny - 1, Math.round(y + sigma)), (row) => value(g, c, row))
        ) {
          const reach = wingReach * sigma;
          lost.push([Math.max(0, Math.ceil(y - reach)), Math.min(ny - 1, Math.floor(y + reach))]);
        }
      }
      // Afterwards, or a fibre beside a lost one would count as lost itself.
      for (const [from, to] of lost) {
        for (let row = from; row <= to; row++) light[(g * ny + row) * groupColumns + c] = Number.NaN;
      }
    }
  }
}

function isLost(from: number, to: number, value: (row: number) => number): boolean {
  if (to < from) return false; // off the detector
  for (let row = from; row <= to; row++) if (!Number.isNaN(value(row))) return false;
  return true;
}

/** A first fit in some of the sample's columns: cosmic rays still in it, then without them. `fibres`: indices of the tramlines
 * that may hold light. */
export function startBackground(sample: ColumnSample, tramlines: Tramlines, fibres: number[]): SmoothBackground {
  leaveOutBesideLost(sample, tramlines, fibres);
  const step = Math.ceil(sample.nGroup / startGroups);
  const rough = turn(sample, tramlines, fibres, noBackground(), 2 * step, 0);
  return turn(sample, tramlines, fibres, rough, step, clipSigma);
}

function turn(
  sample: ColumnSample,
  tramlines: Tramlines,
  fibres: number[],
  background: SmoothBackground,
  step: number,
  clip: number,
): ToldBackground {
  const profileError = Math.max(leastError, ownErrors * tramlines.profile.relativeError);
  const options = { groups: everyGroup(sample, step), background, profileError, clip, normal: true };
  return backgroundTurn(sample, sample.fit(linesOf(tramlines, fibres), options), background);
}
