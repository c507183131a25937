/** Spectra and tramlines against a simulation's truth. Nothing here is used in making them.
 *
 * What could flatter is left in: pulls are measured about 0, not about their own median; points that a method gave up are
 * counted; hits by cosmic rays are chosen by the truth and not by the errors that the extraction claims. */
import { Flag, type Spectra, UNUSABLE } from "../extraction/spectra.js";
import { median } from "../reference/median.js";

/** Images of spectra are nFibre × nx. */
export interface TrueFlux {
  /** e⁻ per column over the whole profile; 0 for an unlit fibre. */
  flux: ArrayLike<number>;
  /** nFibre. */
  lit: readonly boolean[];
}

type Measured = Pick<Spectra, "nFibre" | "nx" | "flux" | "variance" | "flags">;

export interface DecadeScore {
  /** True flux, e⁻ per column: from ≤ flux < to. */
  from: number;
  to: number;
  nPoint: number;
  /** Share of the points that have a value and no flag that forbids its use; the rest is about these. */
  usableShare: number;
  /** Median of (flux − truth) / truth. */
  bias: number;
  /** Robust standard deviation of (flux − truth) / σ about 0: 1.4826 × its median absolute value; 1 for true error bars. */
  pull: number;
  /** Share of the points beyond 5 σ; 6e-7 for Gaussian noise and true error bars. */
  beyond5Sigma: number;
}

/** A Gaussian's σ over its median absolute deviation. */
const SIGMA_PER_MAD = 1.482602218505602;

/** Scores by decade of true flux, 1 e⁻ upwards; decades without a point are left out. */
export function scoreByDecade(spectra: Measured, truth: TrueFlux): DecadeScore[] {
  const scores: DecadeScore[] = [];
  for (let from = 1; from < 1e7; from *= 10) {
    const points = pointsWhere(spectra, truth, (flux) => flux >= from && flux < 10 * from);
    if (points.length === 0) continue;
    const usable = points.filter((i) => isUsable(spectra, i));
    const pulls = usable.map((i) => Math.abs(spectra.flux[i] - truth.flux[i]) / Math.sqrt(spectra.variance[i]));
    scores.push({
      from,
      to: 10 * from,
      nPoint: points.length,
      usableShare: usable.length / points.length,
      bias: median(usable.map((i) => spectra.flux[i] / truth.flux[i] - 1)),
      pull: SIGMA_PER_MAD * median(pulls),
      beyond5Sigma: pulls.filter((pull) => pull > 5).length / pulls.length,
    });
  }
  return scores;
}

/** Scale that spectra have in common against the truth: median of flux / truth over the points from `least` e⁻ on. A pixel flat
 * leaves a frame's scale undetermined by about its own mean, so pulls of bright fibres are told with and without it. */
export function commonScale(spectra: Measured, truth: TrueFlux, least = 1000): number {
  const bright = pointsWhere(spectra, truth, (flux) => flux >= least).filter((i) => isUsable(spectra, i));
  return median(bright.map((i) => spectra.flux[i] / truth.flux[i]));
}

export interface LeakScore {
  /** How many times brighter the neighbour is. */
  contrast: number;
  /** Fibres with such a neighbour over enough columns, and their points. */
  nFibre: number;
  nPoint: number;
  /** Mean over these fibres of Σ(flux − truth) / Σ(neighbour's true flux). */
  meanShare: number;
  /** The one farthest from 0, and its fibre, from 1; NaN and 0 when there is none. */
  worstShare: number;
  worstFibre: number;
}

const FEWEST_COLUMNS = 20;

/** Light of bright neighbours that ends up in faint fibres: points whose brighter neighbour is `contrast` times brighter. */
export function scoreLeak(spectra: Measured, truth: TrueFlux, contrast: number): LeakScore {
  const { nFibre, nx, flux } = spectra;
  const score: LeakScore = {
    contrast,
    nFibre: 0,
    nPoint: 0,
    meanShare: Number.NaN,
    worstShare: Number.NaN,
    worstFibre: 0,
  };
  let sumOfShares = 0;
  for (let k = 0; k < nFibre; k++) {
    let excess = 0;
    let light = 0;
    let n = 0;
    for (let i = k * nx; truth.lit[k] && i < (k + 1) * nx; i++) {
      const bright = Math.max(k > 0 ? truth.flux[i - nx] : 0, k + 1 < nFibre ? truth.flux[i + nx] : 0);
      if (!(bright > contrast * truth.flux[i]) || !isUsable(spectra, i)) continue;
      excess += flux[i] - truth.flux[i];
      light += bright;
      n++;
    }
    if (n < FEWEST_COLUMNS) continue;
    const share = excess / light;
    sumOfShares += share;
    score.nFibre++;
    score.nPoint += n;
    if (!(Math.abs(share) <= Math.abs(score.worstShare))) [score.worstShare, score.worstFibre] = [share, k + 1];
  }
  if (score.nFibre > 0) score.meanShare = sumOfShares / score.nFibre;
  return score;
}

export interface CosmicScore {
  /** Spectrum points on which cosmic rays brought over 5 σ of the noise that the truth predicts. */
  nHit: number;
  /** Of those, flagged: as hit, or as not to be used. */
  foundShare: number;
  /** Of those, neither flagged nor within 5 σ of the truth: spoilt without a word. */
  spoiltShare: number;
  /** Points that no cosmic ray came near, and the share of them flagged as hit. */
  nClean: number;
  falseShare: number;
}

export interface CosmicTruth extends TrueFlux {
  ny: number;
  /** ny × nx, e⁻ that cosmic rays brought. */
  cosmicRays: ArrayLike<number>;
  /** nFibre × nx: y of the fibres' light. */
  trace: ArrayLike<number>;
  /** e⁻ per pixel. */
  readNoise: number;
}

/** Half of the rows that a hit is summed over, and those that must be empty for a point to be clean. */
const HIT_ROWS = 2;
const CLEAN_ROWS = 8;

export function scoreCosmicRays(spectra: Measured, truth: CosmicTruth): CosmicScore {
  const { nx, flags } = spectra;
  const noise = (2 * HIT_ROWS + 1) * truth.readNoise ** 2;
  let [nHit, nFound, nSpoilt, nClean, nFalse] = [0, 0, 0, 0, 0];
  for (const i of pointsWhere(spectra, truth, () => true)) {
    const y = Math.round(truth.trace[i]);
    const flagged = (flags[i] & Flag.cosmicRay) !== 0;
    if (cosmicLight(truth, nx, i % nx, y, HIT_ROWS, 0) > 5 * Math.sqrt(truth.flux[i] + noise)) {
      nHit++;
      if (flagged || !isUsable(spectra, i)) nFound++;
      else if (Math.abs(spectra.flux[i] - truth.flux[i]) > 5 * Math.sqrt(spectra.variance[i])) nSpoilt++;
    } else if (cosmicLight(truth, nx, i % nx, y, CLEAN_ROWS, 1) === 0) {
      nClean++;
      if (flagged) nFalse++;
    }
  }
  return { nHit, foundShare: nFound / nHit, spoiltShare: nSpoilt / nHit, nClean, falseShare: nFalse / nClean };
}

export interface PeakScore {
  /** Columns where an emission line peaks above `least` e⁻ and no cosmic ray came near. */
  nPeak: number;
  /** Median of flux / truth there. */
  ratio: number;
  /** Of all of them: flagged as hit by a cosmic ray, or as not to be used. */
  flaggedShare: number;
  /** Of all of them: without a value, or short by over a fifth and 5 σ. */
  clippedShare: number;
}

/** A line's peak is the largest of so many columns to either side, and twice as bright as the outermost of them. */
const LINE_COLUMNS = 5;
const LINE_CONTRAST = 2;

/** What became of the peaks of bright sharp lines, which are easily taken for cosmic rays. */
export function scorePeaks(spectra: Measured, truth: CosmicTruth, least: number): PeakScore {
  const { nx, flux, variance, flags } = spectra;
  const peaks = pointsWhere(spectra, truth, (light) => light >= least).filter(
    (i) => isPeak(truth.flux, i, nx) && cosmicLight(truth, nx, i % nx, Math.round(truth.trace[i]), CLEAN_ROWS, 1) === 0,
  );
  const usable = peaks.filter((i) => isUsable(spectra, i));
  const whole = usable.filter((i) => {
    const missing = truth.flux[i] - flux[i];
    return missing <= 0.2 * truth.flux[i] || missing <= 5 * Math.sqrt(variance[i]);
  });
  const flagged = peaks.filter((i) => (flags[i] & Flag.cosmicRay) !== 0 || !isUsable(spectra, i));
  return {
    nPeak: peaks.length,
    ratio: median(usable.map((i) => flux[i] / truth.flux[i])),
    flaggedShare: flagged.length / peaks.length,
    clippedShare: 1 - whole.length / peaks.length,
  };
}

function isPeak(flux: ArrayLike<number>, i: number, nx: number): boolean {
  const x = i % nx;
  if (x < LINE_COLUMNS || x >= nx - LINE_COLUMNS) return false;
  for (let d = 1; d <= LINE_COLUMNS; d++) {
    if (flux[i - d] >= flux[i] || flux[i + d] >= flux[i]) return false;
  }
  return flux[i] > LINE_CONTRAST * Math.max(flux[i - LINE_COLUMNS], flux[i + LINE_COLUMNS]);
}

export interface TraceScore {
  /** Median of (tramline − truth) over all fibres and columns, px: profiles that are skewed shift all fibres alike. */
  offset: number;
  /** Root mean square about that offset, over all, and of the worst fibre (from 1), px. */
  rms: number;
  worstRms: number;
  worstFibre: number;
  /** Lit fibres whose tramline lies over half a pitch from the truth: named wrongly. */
  nMisnamed: number;
}

/** Tramlines y(x) against the truth, both nFibre × nx, lit fibres. `pitch`: px. */
export function scoreTrace(
  y: ArrayLike<number>,
  trueTrace: ArrayLike<number>,
  lit: readonly boolean[],
  pitch: number,
): TraceScore {
  const nx = y.length / lit.length;
  const fibres = lit.flatMap((isLit, k) => (isLit ? [k] : []));
  const differences = fibres.map((k) =>
    Float64Array.from({ length: nx }, (_, x) => y[k * nx + x] - trueTrace[k * nx + x]),
  );
  const offset = median(differences.flatMap((one) => Array.from(one)));
  const rms = differences.map((one) => Math.sqrt(one.reduce((sum, d) => sum + (d - offset) ** 2, 0) / nx));
  const worst = rms.indexOf(Math.max(...rms));
  return {
    offset,
    rms: Math.sqrt(rms.reduce((sum, one) => sum + one * one, 0) / rms.length),
    worstRms: rms[worst],
    worstFibre: fibres[worst] + 1,
    nMisnamed: differences.filter((one) => Math.abs(median(one) - offset) > pitch / 2).length,
  };
}

function isUsable({ flux, variance, flags }: Measured, i: number): boolean {
  return (flags[i] & UNUSABLE) === 0 && variance[i] > 0 && Number.isFinite(flux[i]);
}

/** Indices of the lit fibres' points with such a true flux. */
function pointsWhere({ nFibre, nx }: Measured, truth: TrueFlux, holds: (flux: number) => boolean): number[] {
  const points: number[] = [];
  for (let k = 0; k < nFibre; k++) {
    for (let i = k * nx; truth.lit[k] && i < (k + 1) * nx; i++) if (holds(truth.flux[i])) points.push(i);
  }
  return points;
}

/** e⁻ of cosmic rays within `rows` rows and `columns` columns of a place. */
function cosmicLight({ ny, cosmicRays }: CosmicTruth, nx: number, x: number, y: number, rows: number, columns: number) {
  let sum = 0;
  for (let j = Math.max(0, y - rows); j <= Math.min(ny - 1, y + rows); j++) {
    for (let i = Math.max(0, x - columns); i <= Math.min(nx - 1, x + columns); i++) sum += cosmicRays[j * nx + i];
  }
  return sum;
}
