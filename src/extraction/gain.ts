/** What weighting can gain on this frame, from its profiles and the model's variances alone: no flux of the frame's spectra
 * enters, so that what the spectra show can be held against it.
 *
 * Of a fibre alone, P its profile on the pixels, s the share of each pixel inside the aperture, c = Σ sP the light caught:
 *
 *     weighted (Horne 1986)   var = 1 / Σ P²/v
 *     plain sum               var = Σ s² v / c²
 *
 * so the plain sum takes Σ s²·Σ P² / c² times the exposure where v is the same on every pixel (background or read noise; 1/Σ P²
 * is the noise-equivalent width), and Σ s²P / c² times where v follows the fibre's own light. Among neighbours the whole
 * system is solved, as joint extraction and the cross-talk correction do. */
import { factorBand, inverseBand } from "../reference/banded.js";
import { boxcar } from "../reference/boxcar.js";
import type { Column } from "../reference/column.js";
import { type RawEstimate, solveCrosstalk, withoutCrosstalk } from "../reference/crosstalk.js";
import { normalEquations } from "../reference/joint.js";
import { median } from "../reference/median.js";
import { optimal } from "../reference/optimal.js";
import { estimatorWeights } from "./crosstalkMatrix.js";
import { type FrameFit, modelColumns } from "./modelColumn.js";
import type { Method } from "./spectra.js";

/** The five ways to extract that are compared, and where they stand in every list of this comparison. */
export const cases: readonly (readonly [Method, boolean])[] = [
  ["joint", true],
  ["optimal", true],
  ["optimal", false],
  ["boxcar", true],
  ["boxcar", false],
];
export const JOINT = 0;
export const BOXCAR = 3;

const largestSample = 96;

/** What the model expects of one column. Lists go by `cases`, arrays by active fibre. */
export interface ExpectedColumn {
  x: number;
  bandwidth: number;
  /** e⁻² */
  variance: Float64Array[];
  /** Variance of the estimate less joint's, e⁻². Joint has the least variance of all unbiased estimators, so a corrected one
   * differs from it by var − var of joint (Hausman 1978, Econometrica 46, 1251); an uncorrected one has the covariance C Σ with it. */
  differenceVariance: Float64Array[];
  /** nFibre × (2·bandwidth + 1): share of fibre m's light that the uncorrected estimate of k holds, at
   * k·(2·bandwidth+1) + m − k + bandwidth; 1 at m = k. Null for joint and for corrected estimates, whose C is the identity. */
  crosstalk: (Float64Array | null)[];
}

/** Exposure times that a plain sum needs, over that of weighting: squares of the gain in S/N. Medians over fibres and columns. */
export interface LoneGain {
  /** 1/Σ P², pixels. */
  noiseEquivalentWidth: number;
  /** Share of a fibre's light within the aperture. */
  caughtShare: number;
  backgroundLimited: number;
  photonLimited: number;
}

/** At most 96 columns, evenly spread. */
export function expectedColumns(fit: FrameFit): ExpectedColumn[] {
  const columnAt = modelColumns(fit);
  return sampleOf(fit.input.nx).map((x) => expectColumn(columnAt(x), x, fit.input.halfAperture));
}

export function loneGain(fit: FrameFit): LoneGain {
  const { input } = fit;
  const columnAt = modelColumns(fit);
  const [widths, caught, background, photon]: number[][] = [[], [], [], []];
  for (const x of sampleOf(input.nx)) {
    const column = columnAt(x);
    const { nFibre, nWindow, weights } = column;
    const inside = estimatorWeights(column, "boxcar", input.halfAperture);
    for (let at = 0; at < nFibre * nWindow; at += nWindow) {
      let [p, pp, sp, ss, ssp] = [0, 0, 0, 0, 0];
      for (let i = at; i < at + nWindow; i++) {
        p += weights[i];
        pp += weights[i] ** 2;
        sp += inside[i] * weights[i];
        ss += inside[i] ** 2;
        ssp += inside[i] ** 2 * weights[i];
      }
      if (!(sp > 0)) continue;
      widths.push((p * p) / pp);
      caught.push(sp / p);
      background.push((ss * pp) / (sp * sp));
      photon.push((ssp * p) / (sp * sp));
    }
  }
  const [noiseEquivalentWidth, caughtShare] = [median(widths), median(caught)];
  return { noiseEquivalentWidth, caughtShare, backgroundLimited: median(background), photonLimited: median(photon) };
}

function sampleOf(nx: number): number[] {
  const n = Math.min(nx, largestSample);
  return Array.from({ length: n }, (_, i) => Math.floor(((i + 0.5) * nx) / n));
}

function expectColumn(column: Column, x: number, halfAperture: number): ExpectedColumn {
  const { nFibre, bandwidth } = column;
  const normal = normalEquations(column);
  const factors = normal.band.slice();
  factorBand(factors, nFibre, bandwidth);
  const inverse = inverseBand(factors, nFibre, bandwidth);
  const raws = { joint: null, optimal: optimal(normal, nFibre, bandwidth), boxcar: boxcar(column, halfAperture) };
  const ofJoint = Float64Array.from({ length: nFibre }, (_, k) => inverse[k * (bandwidth + 1)]);
  const expected: ExpectedColumn = { x, bandwidth, variance: [], differenceVariance: [], crosstalk: [] };
  for (const [method, corrected] of cases) {
    const raw = raws[method];
    const shared = raw === null || corrected ? null : ownShareOne(raw, nFibre, bandwidth);
    const solve = corrected ? solveCrosstalk : withoutCrosstalk;
    const variance = raw === null ? ofJoint : solve(raw, nFibre, bandwidth).variance;
    expected.variance.push(variance);
    expected.crosstalk.push(shared);
    expected.differenceVariance.push(
      variance.map((own, k) => {
        const covariance = shared === null ? ofJoint[k] : withJoint(shared, inverse, k, nFibre, bandwidth);
        return own + ofJoint[k] - 2 * covariance;
      }),
    );
  }
  return expected;
}

/** C with each row over its own diagonal: an uncorrected estimate makes good what it loses of its own light. */
function ownShareOne({ crosstalk }: RawEstimate, nFibre: number, bandwidth: number): Float64Array {
  const full = 2 * bandwidth + 1;
  const own = Float64Array.from({ length: nFibre }, (_, k) => crosstalk[k * full + bandwidth]);
  return crosstalk.map((share, at) => (own[Math.floor(at / full)] > 0 ? share / own[Math.floor(at / full)] : 0));
}

/** (C Σ)[k][k], Σ the covariance of joint. */
function withJoint(shared: Float64Array, inverse: Float64Array, k: number, nFibre: number, bandwidth: number): number {
  let sum = 0;
  for (let m = Math.max(0, k - bandwidth); m <= Math.min(nFibre - 1, k + bandwidth); m++) {
    const [low, high] = [Math.min(k, m), Math.max(k, m)];
    sum += shared[k * (2 * bandwidth + 1) + m - k + bandwidth] * inverse[high * (bandwidth + 1) + high - low];
  }
  return sum;
}
