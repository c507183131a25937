/** Centres and widths of all lit fibres in groups of columns over the whole flat, by joint linearised centring about
 * where the fibres are thought to be. */
import { Centring, type CentringColumn, type CentringResult } from "../kernels/centring.js";
import { Centroider } from "../kernels/centroid.js";
import type { Kernels } from "../kernels/module.js";
import type { ColumnRange } from "../reference/groups.js";
import { legendreArgument, legendreValue } from "../reference/legendre.js";
import { overlapping, REACH_SIGMAS, rowsNear } from "./find.js";
import { type ColumnGroup, type Flat, groupColumns, groupStep } from "./flat.js";

/** Within a group a tramline may climb by this, px; steeper ones get groups of fewer columns. */
const MAX_CLIMB = 0.4;
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
  centre: Float64Array[];
  /** px², from pixel noise and the profile's own error. */
  centreVariance: Float64Array[];
  /** σ, px; NaN when widths were not asked for. */
  sigma: Float64Array[];
  sigmaVariance: Float64Array[];
  /** [group][row]: e⁻ per pixel of the smooth background. */
  background: Float64Array[];
  /** The profile's own relative error: what residuals scatter beyond noise, as a share of the model. */
  relativeError: number;
  /** Pixels left out as cosmic rays or the like. */
  nRejected: number;
}

export class Meter {
  private readonly centring: Centring;
  private readonly near: number;
  /** [group][row]: 0 for a pixel that was left out. */
  private readonly good: Uint8Array[];

  constructor(
    kernels: Kernels,
    private readonly groups: ColumnGroup[],
    private readonly ny: number,
    private readonly nFibre: number,
    pitch: number,
    sigma: number,
  ) {
    const reach = Math.min(REACH_SIGMAS * sigma * 1.2, 2 * pitch);
    const size = { nRow: ny, nFibre, neighbours: overlapping(reach, pitch), reach, nBack: BACKGROUND_TERMS };
    this.centring = new Centring(kernels, size);
    this.near = BACKGROUND_PITCHES * pitch;
    this.good = groups.map((group) => Uint8Array.from(group.count, (n) => (n > 0 ? 1 : 0)));
  }

  /** One round over all groups. `relativeError`: the profile's own, as known so far; with `reject`, pixels far off the model
   * are left out from here on, and their columns measured again. */
  measure(guess: Guess, withWidth: boolean, relativeError: number, reject: boolean): Measured {
    const nPar = withWidth ? 3 : 2;
    const perGroup = () => this.groups.map(() => new Float64Array(this.nFibre).fill(Number.NaN));
    const measured: Measured = {
      light: perGroup(),
      lightVariance: perGroup(),
      centre: perGroup(),
      centreVariance: perGroup(),
      sigma: perGroup(),
      sigmaVariance: perGroup(),
      background: [],
      relativeError,
      nRejected: 0,
    };
    const misfit: Misfit = { residual: 0, noise: 0, light: 0, nPixel: 0, nUnknown: 0 };
    for (let g = 0; g < this.groups.length; g += 2) {
      const pair = g + 1 < this.groups.length ? [g, g + 1] : [g];
      let columns = pair.map((i) => this.column(i, guess, undefined, relativeError));
      let results = this.centring.measure(columns, nPar);
      columns = pair.map((i, lane) => this.column(i, guess, results[lane].model, relativeError));
      results = this.centring.measure(columns, nPar);
      if (reject) {
        const nOut = pair.map((i, lane) => this.rejectPixels(i, results[lane].model, relativeError));
        if (nOut.some((n) => n > 0)) {
          measured.nRejected += nOut.reduce((sum, n) => sum + n, 0);
          columns = pair.map((i, lane) => this.column(i, guess, results[lane].model, relativeError));
          results = this.centring.measure(columns, nPar);
        }
      }
      pair.forEach((i, lane) => {
        this.keep(i, guess, results[lane], nPar, measured);
        measured.background.push(backgroundRows(results[lane].background, this.ny));
        this.addMisfit(columns[lane], this.groups[i], results[lane], misfit);
      });
    }
    measured.relativeError = profileError(misfit);
    return measured;
  }

  /** Centres by window centroids instead, for wide pitches: the joint rounds before tell light, widths and background. */
  centroids(kernels: Kernels, guess: Guess, joint: Measured, halfWidth: number): Measured {
    const centroider = new Centroider(kernels, this.ny);
    const centre = this.groups.map((group, g) => {
      centroider.load(group.mean, this.good[g]);
      return guess.centre[g].map((y) => this.centroidOf(centroider, g, y, halfWidth, joint.background[g]));
    });
    return { ...joint, centre };
  }

  private centroidOf(
    centroider: Centroider,
    g: number,
    start: number,
    halfWidth: number,
    background: Float64Array,
  ): number {
    const from = Math.round(start - halfWidth);
    const to = Math.round(start + halfWidth);
    // A window with a hole, or over the edge, has no centroid.
    for (let y = from; y <= to; y++) if (this.good[g][y] !== 1) return Number.NaN;
    let centre = start;
    for (let round = 0; round < CENTROID_ROUNDS; round++) {
      centre = centroider.measure(centre, halfWidth, background[Math.round(start)]);
      if (!(Math.abs(centre - start) < 0.5 * halfWidth)) return Number.NaN;
    }
    return centre;
  }

  private column(g: number, guess: Guess, model: Float64Array | undefined, relativeError: number): CentringColumn {
    const group = this.groups[g];
    const near = rowsNear(guess.centre[g], this.near, this.ny);
    const weight = new Float64Array(this.ny);
    for (let y = 0; y < this.ny; y++) {
      if (near[y] === 0 || this.good[g][y] === 0) continue;
      weight[y] = 1 / this.variance(group, y, model === undefined ? group.mean[y] : model[y], relativeError);
    }
    const climb2 = group.width * group.width - 1;
    const sigma = guess.sigma[g].map((s, k) => Math.sqrt(s * s + (guess.slope[g][k] ** 2 * climb2) / 12));
    return { data: group.mean, weight, centre: guess.centre[g], sigma };
  }

  private variance(group: ColumnGroup, y: number, model: number, relativeError: number): number {
    const light = Math.max(0, model);
    return group.fixedVariance[y] + group.variancePerElectron[y] * light + (relativeError * light) ** 2;
  }

  private rejectPixels(g: number, model: Float64Array, relativeError: number): number {
    const group = this.groups[g];
    let n = 0;
    for (let y = 0; y < this.ny; y++) {
      if (this.good[g][y] === 0) continue;
      // What stands next to bright pixels may stray by a share of those.
      const beside = Math.max(model[y], 0.5 * (model[y - 1] ?? 0), 0.5 * (model[y + 1] ?? 0));
      const off = group.mean[y] - model[y];
      if (off * off <= KAPPA_PIXEL ** 2 * this.variance(group, y, beside, Math.max(START_ERROR, relativeError)))
        continue;
      this.good[g][y] = 0;
      n++;
    }
    return n;
  }

  private keep(g: number, guess: Guess, result: CentringResult, nPar: number, measured: Measured): void {
    const climb2 = this.groups[g].width ** 2 - 1;
    for (let k = 0; k < this.nFibre; k++) {
      const at = k * nPar;
      const a = result.solution[at];
      measured.light[g][k] = a;
      measured.lightVariance[g][k] = result.variance[at];
      if (!(a > 0) || !(result.variance[at + 1] > 0)) continue;
      const shift = result.solution[at + 1] / a;
      measured.centre[g][k] = guess.centre[g][k] + Math.max(-1, Math.min(1, shift));
      measured.centreVariance[g][k] = result.variance[at + 1] / (a * a);
      if (nPar < 3 || !(result.variance[at + 2] > 0)) continue;
      const smear2 = (guess.slope[g][k] ** 2 * climb2) / 12;
      const seen =
        Math.sqrt(guess.sigma[g][k] ** 2 + smear2) + Math.max(-0.5, Math.min(0.5, result.solution[at + 2] / a));
      measured.sigma[g][k] = Math.sqrt(Math.max(0.04, seen * seen - smear2));
      measured.sigmaVariance[g][k] = result.variance[at + 2] / (a * a);
    }
  }

  private addMisfit({ weight }: CentringColumn, group: ColumnGroup, result: CentringResult, misfit: Misfit): void {
    for (let y = 0; y < this.ny; y++) {
      if (weight[y] === 0) continue;
      const light = Math.max(0, result.model[y]);
      misfit.residual += (group.mean[y] - result.model[y]) ** 2;
      misfit.noise += this.variance(group, y, light, 0);
      misfit.light += light * light;
      misfit.nPixel++;
    }
    misfit.nUnknown += result.solution.reduce((n, value) => n + (value !== 0 ? 1 : 0), BACKGROUND_TERMS);
  }
}

function backgroundRows(coef: Float64Array, ny: number): Float64Array {
  return Float64Array.from({ length: ny }, (_, y) => legendreValue(coef, legendreArgument(y, ny)));
}

/** Sums over pixels, Σ r², Σ v (noise alone) and Σ m², and counts. */
interface Misfit {
  residual: number;
  noise: number;
  light: number;
  nPixel: number;
  nUnknown: number;
}

/** ε of v + (ε m)² that explains the residuals, E[Σ r²] = (1 − unknowns/pixels) · Σ (v + ε² m²), every pixel taken to carry
 * its share of the unknowns. Sums without weights: it is bright pixels whose misfit matters. */
function profileError({ residual, noise, light, nPixel, nUnknown }: Misfit): number {
  if (!(light > 0) || nPixel <= nUnknown) return 0;
  return Math.sqrt(Math.max(0, (residual / (1 - nUnknown / nPixel) - noise) / light));
}
