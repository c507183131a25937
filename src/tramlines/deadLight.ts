/** Light in a science frame where the flat had none: a fibre that is held for dead takes no part in any fit, so its light goes
 * to its neighbours and to the background without a word. Here dead positions are fitted like fibres, together with all
 * lit ones, in some columns of the frame. */
import type { Frame } from "../detector/frame.js";
import type { Kernels } from "../kernels/module.js";
import { factorBand, inverseBand } from "../reference/banded.js";
import type { SmoothBackground } from "../reference/extract.js";
import { median } from "../reference/median.js";
import type { ShapeTable } from "../reference/shape.js";
import { TraceError } from "./errors.js";
import { fibres } from "./name.js";
import { linesOf, profileTable } from "./profileTable.js";
import { type Lines, localDesign, localSystem } from "./shape/column.js";
import { frameColumn, widenBackground } from "./shape/refine.js";
import { backgroundColumn, settleColumn, wholeProfiles } from "./shape/step.js";
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

const nColumn = 64;
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
const troughColumns = 16;
const troughShare = 0.05;
/** Standard error of a median over that of a mean, normal errors: √(π/2). */
const medianPrice = 1.2533;
/** Share of the slit positions from which on dead ones with light are no accident. */
const ruinousShare = 0.05;

/** Light at every dead position on the detector. `tramlines`: moved to the frame's light; `background`: seen elsewhere than at
 * dead positions, or their light would be taken for it; null where no gap shows it: then the darkest troughs between the
 * fibres stand for it. */
export function measureDeadLight(
  kernels: Kernels,
  frame: Frame,
  tramlines: Tramlines,
  background: SmoothBackground | null,
): DeadLight[] {
  const { state, nFibre } = tramlines;
  if (!state.includes("dead")) return [];
  const lines = linesOf(tramlines, Array.from(state.keys()));
  const table = profileTable(kernels, tramlines.profile);
  const smooth = widenBackground(background ?? { nX: 1, nY: 1, coefficients: Float64Array.of(troughLevel(frame)) });
  const columns = Array.from({ length: nColumn }, (_, i) => Math.floor(((i + 0.61) * frame.nx) / nColumn));
  const fits = columns.map((x) => columnLight(frame, lines, table, smooth, x));
  const fluxes = (k: number) => fits.map(({ flux }) => flux[k]).filter((value) => !Number.isNaN(value));
  const typical = Array.from({ length: nFibre }, (_, k) => median(fluxes(k)));
  const lit = typical.filter((flux, k) => state[k] !== "dead" && !Number.isNaN(flux)).sort((a, b) => a - b);
  const least = Math.max(leastElectrons, leastShare * (lit[lit.length >> 2] ?? 0));
  const wings = Math.max(wingShare, wingErrors * tramlines.profile.relativeError);
  return state.flatMap((one, index) => {
    const n = fluxes(index).length;
    if (one !== "dead" || n < leastColumns) return [];
    const error = (medianPrice * median(fits.map(({ error }) => error[index]).filter((e) => e > 0))) / Math.sqrt(n);
    let around = 0;
    for (let k = Math.max(0, index - wingReach); k <= Math.min(nFibre - 1, index + wingReach); k++) {
      if (k !== index && state[k] !== "dead") around += Math.max(0, typical[k] || 0);
    }
    const flux = typical[index];
    return [{ index, flux, error, around, shines: flux - wings * around > certainSigma * error && flux > least }];
  });
}

/** Level below which few places of the frame lie, e⁻ per pixel: medians over short pieces of rows. */
function troughLevel({ nx, ny, electrons, mask }: Frame): number {
  const levels: number[] = [];
  for (let y = 0; y < ny; y++) {
    for (let x0 = 0; x0 + troughColumns <= nx; x0 += 4 * troughColumns) {
      const piece = electrons.subarray(y * nx + x0, y * nx + x0 + troughColumns);
      const good = piece.filter((_, i) => mask[y * nx + x0 + i] === 0);
      if (2 * good.length >= troughColumns) levels.push(median(good));
    }
  }
  levels.sort((a, b) => a - b);
  return levels[Math.floor(troughShare * levels.length)] ?? 0;
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

/** All positions' joint fluxes in one column with their errors; NaN where no good pixel tells. */
function columnLight(frame: Frame, lines: Lines, table: ShapeTable, smooth: Float64Array, x: number) {
  const data = frameColumn(frame, null, x);
  const profiles = wholeProfiles(lines, table, x);
  const under = backgroundColumn(smooth, x, lines);
  const level = data.light.map((light, y) => light - under[y]);
  const { flux } = settleColumn(profiles, data, level, under);
  const system = localSystem(profiles, localDesign(profiles, flux, 1), level, data.inverseVariance, 1);
  const { band, halfBandwidth } = system;
  factorBand(band, lines.nFibre, halfBandwidth);
  const inverse = inverseBand(band, lines.nFibre, halfBandwidth);
  const error = Float64Array.from(flux, (_, k) => Math.sqrt(Math.max(0, inverse[k * (halfBandwidth + 1)])));
  // A tramline off the frame has the far wing alone to tell of it.
  const told = (k: number) => error[k] > 0 && profiles.centre[k] > 0 && profiles.centre[k] < lines.ny - 1;
  return { flux: flux.map((value, k) => (told(k) ? value : Number.NaN)), error };
}
