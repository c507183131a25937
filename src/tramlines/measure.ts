/** Centres and widths of all lit fibres in groups of columns over the whole flat, by joint linearised centring about
 * where the fibres are thought to be. */
import { medianOf } from "../detector/clip.js";
import { Centring, type CentringResult, type Misfit } from "../kernels/centring.js";
import { Centroider } from "../kernels/centroid.js";
import type { Kernels } from "../kernels/module.js";
import type { ColumnRange } from "../reference/groups.js";
import { legendreArgument, legendreValue } from "../reference/legendre.js";
import { overlapping, REACH_SIGMAS } from "./find.js";
import { type ColumnGroup, type Flat, groupColumns, groupStep } from "./flat.js";

/** Within a group a tramline may climb by this, px; steeper ones get groups of fewer columns. */
const MAX_CLIMB = 0.4;
/** From one group to the next it may climb by this, px, for both to be measured side by side. */
const MAX_PAIR_CLIMB = 3;
const BACKGROUND_TERMS = 4;
const CENTROID_ROUNDS = 4;
/** Light in the background is trusted this many pitches from a fibre. */
const BACKGROUND_PITCHES = 1.3;
/** A pixel this many σ off the model is left out, σ with the profile's own error in it. */
const KAPPA_PIXEL = 7;
/** First guess at the profile's own relative error. */
export const START_ERROR = 0.02;

/** Groups over the whole width, narrow where the tramlines are steep. */
export function cutIntoGroups(kernels: Kernels, flat: Flat, steepest: number): ColumnGroup[] {
  const step = groupStep(flat.nx);
  const width = Math.max(1, Math.min(step, Math.floor(MAX_CLIMB / Math.max(1e-9, steepest))));
  const ranges: ColumnRange[] = [];
  for (let from = 0; from < flat.nx; from += step) {
    const spare = Math.floor((Math.min(step, flat.nx - from) - width) / 2);
    const first = from + Math.max(0, spare);
    ranges.push({ from: first, to: Math.min(flat.nx, first + width) });
  }
  return groupColumns(kernels, flat, ranges);
}

/** Where each lit fibre is thought to be in each group, [group][fibre]. */
export interface Guess {
  centre: Float64Array[];
  /** σ, px. */
  sigma: Float64Array[];
  /** How much a tramline climbs in a column, px; widens what a group shows. */
  slope: Float64Array[];
}

/** What was measured, all [group][fibre]. */
export interface Measured {
  light: Float64Array[];
  lightVariance: Float64Array[];
  /** nFibre: over the groups. */
  medianLight: Float64Array;
  centre: Float64Array[];
  /** px², from pixel noise and the profile's own error. */
  centreVariance: Float64Array[];
  /** σ, px; NaN when widths were not asked for. */
  sigma: Float64Array[];
  sigmaVariance: Float64Array[];
  /** [group]: Legendre terms of the smooth background over the rows, e⁻ per pixel. */
  background: Float64Array[];
  /** The profile's own relative error: what residuals scatter beyond noise, as a share of the model. */
  relativeError: number;
}

export interface MeasureRounds {
  /** Centres alone, or widths too. */
  nPar: 2 | 3;
  nRound: number;
  /** The profile's own, as known so far. */
  relativeError: number;
  /** Pixels far off the model are left out from here on. */
  reject: boolean;
  /** Groups to measure: 1 for all, else about one in so many. */
  oneIn: number;
}

export class Meter {
  private readonly centring: Centring;
  private readonly near: number;
  /** Groups that one pair of columns holds: one alone where tramlines are too steep for two. */
  private readonly nPerPair: number;

  /** @param steepest px of y per px of x. */
  constructor(
    kernels: Kernels,
    private readonly groups: ColumnGroup[],
    private readonly ny: number,
    private readonly nFibre: number,
    { pitch, sigma, steepest }: { pitch: number; sigma: number; steepest: number },
  ) {
    const reach = Math.min(REACH_SIGMAS * sigma * 1.2, 2 * pitch);
    const climb = groups.length > 1 ? steepest * (groups[1].x - groups[0].x) : 0;
    this.nPerPair = climb < MAX_PAIR_CLIMB ? 2 : 1;
    const nColumn = (2 / this.nPerPair) * groups.length;
    const neighbours = overlapping(reach, pitch);
    this.centring = new Centring(kernels, { nRow: ny, nFibre, nColumn, neighbours, reach, nBack: BACKGROUND_TERMS });
    this.near = BACKGROUND_PITCHES * pitch;
    groups.forEach((group, g) => {
      const good = Uint8Array.from(group.count, (n) => (n > 0 ? 1 : 0));
      for (const column of this.columnsOf(g)) this.centring.place(column, { ...group, data: group.mean, good });
    });
  }

  /** The groups that a measurement of one in so many takes. */
  groupsOf(oneIn: number): ColumnGroup[] {
    return this.indicesOf(oneIn).map((g) => this.groups[g]);
  }

  /** Measures `groupsOf(oneIn)` about `guess`, which is given for those. */
  measure(guess: Guess, { nPar, nRound, relativeError, reject, oneIn }: MeasureRounds): Measured {
    const indices = this.indicesOf(oneIn);
    indices.forEach((g, i) => {
      const sigma = new Float64Array(this.nFibre);
      for (let k = 0; k < sigma.length; k++) {
        sigma[k] = Math.sqrt(guess.sigma[i][k] ** 2 + smear(this.groups[g], guess.slope[i][k]));
      }
      for (const column of this.columnsOf(g)) this.centring.guess(column, { centre: guess.centre[i], sigma });
    });
    const rejectError = Math.max(START_ERROR, relativeError);
    const kappa = reject ? KAPPA_PIXEL : 0;
    this.centring.measure({ nPar, nRound, near: this.near, relativeError, kappa, rejectError }, oneIn);
    const perGroup = () => indices.map(() => new Float64Array(this.nFibre).fill(Number.NaN));
    const measured: Measured = {
      light: perGroup(),
      lightVariance: perGroup(),
      medianLight: new Float64Array(this.nFibre),
      centre: perGroup(),
      centreVariance: perGroup(),
      sigma: perGroup(),
      sigmaVariance: perGroup(),
      background: [],
      relativeError,
    };
    indices.forEach((g, i) => {
      const result = this.centring.result(this.columnsOf(g)[0]);
      this.keep(this.groups[g], i, guess, result, nPar, measured);
      measured.background.push(result.background);
    });
    const light = new Float64Array(indices.length);
    for (let k = 0; k < this.nFibre; k++) {
      for (let i = 0; i < light.length; i++) light[i] = measured.light[i][k];
      measured.medianLight[k] = medianOf(light);
    }
    measured.relativeError = profileError(indices.map((g) => this.centring.misfit(this.columnsOf(g)[0])));
    return measured;
  }

  /** Centres by window centroids instead, for wide pitches: the joint rounds before tell light, widths and background. */
  centroids(kernels: Kernels, guess: Guess, joint: Measured, halfWidth: number): Measured {
    const centroider = new Centroider(kernels, this.ny);
    const centre = this.groups.map((group, g) => {
      const good = this.centring.good(this.columnsOf(g)[0]);
      centroider.load(group.mean, good);
      return guess.centre[g].map((y) => this.centroidOf(centroider, good, y, halfWidth, joint.background[g]));
    });
    return { ...joint, centre };
  }

  private centroidOf(
    centroider: Centroider,
    good: Float64Array,
    start: number,
    halfWidth: number,
    background: Float64Array,
  ): number {
    const from = Math.round(start - halfWidth);
    const to = Math.round(start + halfWidth);
    // A window with a hole, or over the edge, has no centroid.
    for (let y = from; y <= to; y++) if (good[y] !== 1) return Number.NaN;
    const under = legendreValue(background, legendreArgument(Math.round(start), this.ny));
    let centre = start;
    for (let round = 0; round < CENTROID_ROUNDS; round++) {
      centre = centroider.measure(centre, halfWidth, under);
      if (!(Math.abs(centre - start) < 0.5 * halfWidth)) return Number.NaN;
    }
    return centre;
  }

  private columnsOf(g: number): number[] {
    return this.nPerPair === 2 ? [g] : [2 * g, 2 * g + 1];
  }

  /** The groups in every `oneIn`-th pair. */
  private indicesOf(oneIn: number): number[] {
    return Array.from(this.groups.keys()).filter((g) => Math.floor(g / this.nPerPair) % oneIn === 0);
  }

  private keep(group: ColumnGroup, i: number, guess: Guess, result: CentringResult, nPar: number, measured: Measured) {
    const { solution, variance } = result;
    for (let k = 0; k < this.nFibre; k++) {
      const at = k * nPar;
      const a = solution[at];
      measured.light[i][k] = a;
      measured.lightVariance[i][k] = variance[at];
      if (!(a > 0) || !(variance[at + 1] > 0)) continue;
      measured.centre[i][k] = guess.centre[i][k] + within(solution[at + 1] / a, 1);
      measured.centreVariance[i][k] = variance[at + 1] / (a * a);
      if (nPar < 3 || !(variance[at + 2] > 0)) continue;
      const smear2 = smear(group, guess.slope[i][k]);
      const seen = Math.sqrt(guess.sigma[i][k] ** 2 + smear2) + within(solution[at + 2] / a, 0.5);
      measured.sigma[i][k] = Math.sqrt(Math.max(0.04, seen * seen - smear2));
      measured.sigmaVariance[i][k] = variance[at + 2] / (a * a);
    }
  }
}

function within(x: number, limit: number): number {
  return Math.max(-limit, Math.min(limit, x));
}

/** px² that a tramline's climb over a group's columns adds to a width's square. */
function smear({ width }: ColumnGroup, slope: number): number {
  return (slope * slope * (width * width - 1)) / 12;
}

/** ε of v + (ε m)² that explains the residuals, E[Σ r²] = (1 − unknowns/pixels) · Σ (v + ε² m²), every pixel taken to carry
 * its share of the unknowns. Sums without weights: it is bright pixels whose misfit matters. */
function profileError(misfits: Misfit[]): number {
  const total = (key: keyof Misfit) => misfits.reduce((sum, misfit) => sum + misfit[key], 0);
  const [light, nPixel, nUnknown] = [total("light"), total("nPixel"), total("nUnknown")];
  if (!(light > 0) || nPixel <= nUnknown) return 0;
  const residual = total("residual") / (1 - nUnknown / nPixel);
  return Math.sqrt(Math.max(0, (residual - total("noise")) / light));
}
