/** Width of unresolved lines over the detector: FWHM(x, s) = Σ c_ij P_i(x) P_j(s), x and the place s along the slit each on
 * [−1, 1], put through single lines' widths by least squares, those beyond 4 robust scatters left out in turns. */
import { SIGMA_PER_MAD } from "../detector/clip.js";
import { legendreArgument, legendreBasis, legendreValue } from "../reference/legendre.js";
import { median } from "../reference/median.js";
import { NormalEquations } from "./leastSquares.js";

export interface WidthPoint {
  x: number;
  /** From 0. */
  fibre: number;
  /** Columns. */
  fwhm: number;
  fwhmError: number;
}

export interface LineWidths {
  /** Along x. */
  degree: number;
  /** nFibre × (degree + 1), columns. */
  coefficients: Float64Array;
  /** What lines' widths stray from the surface beyond their errors, columns. */
  scatter: number;
  /** Lines that it goes through. */
  nLine: number;
}

const kappa = 4;
const maxRounds = 6;
/** Lines for each term of the surface, at least. */
const linesPerTerm = 8;

/** `slit`: nFibre, places along the slit on [−1, 1]. Null without a line. */
export function fitLineWidths(points: WidthPoint[], slit: Float64Array, nx: number): LineWidths | null {
  if (points.length === 0) return null;
  const nFibre = new Set(points.map(({ fibre }) => fibre)).size;
  const perFibre = points.length / nFibre;
  const degree = perFibre >= 12 ? 2 : perFibre >= 4 ? 1 : 0;
  const slitDegree = nFibre >= 12 ? 2 : nFibre >= 4 ? 1 : 0;
  if (points.length < linesPerTerm * (degree + 1) * (slitDegree + 1)) return fitDegrees(points, slit, nx, 0, 0);
  return fitDegrees(points, slit, nx, degree, slitDegree);
}

/** FWHM in columns at column x of a fibre. */
export function widthAt({ degree, coefficients }: LineWidths, fibre: number, x: number, nx: number): number {
  return legendreValue(coefficients, legendreArgument(x, nx), fibre * (degree + 1), degree + 1);
}

function fitDegrees(
  points: WidthPoint[],
  slit: Float64Array,
  nx: number,
  degree: number,
  slitDegree: number,
): LineWidths {
  const [nX, nS] = [degree + 1, slitDegree + 1];
  const normal = new NormalEquations(nX * nS);
  const index = Int32Array.from({ length: nX * nS }, (_, i) => i);
  const rows = points.map(({ x, fibre }) => {
    const [along, across] = [legendreBasis(legendreArgument(x, nx), nX), legendreBasis(slit[fibre], nS)];
    return Float64Array.from(index, (i) => along[Math.floor(i / nS)] * across[i % nS]);
  });
  // Bright lines know their width so well that only the surface's own faults count.
  const floor = 0.01 * median(points.map(({ fwhm }) => fwhm));
  const weights = points.map(({ fwhmError }) => 1 / (fwhmError * fwhmError + floor * floor));
  let used = points.map(() => true);
  let terms = new Float64Array(nX * nS);
  let off: number[] = [];
  for (let round = 0; round < maxRounds; round++) {
    normal.clear();
    points.forEach(({ fwhm }, p) => {
      if (used[p]) normal.add(index, rows[p], nX * nS, fwhm, weights[p]);
    });
    terms = Float64Array.from(normal.solve());
    off = points.map(({ fwhm }, p) => fwhm - rows[p].reduce((sum, value, i) => sum + value * terms[i], 0));
    const scaled = off.map((value, p) => Math.abs(value) * Math.sqrt(weights[p]));
    const limit = kappa * SIGMA_PER_MAD * median(scaled.filter((_, p) => used[p]));
    const next = scaled.map((value) => value <= limit);
    if (next.every((value, p) => value === used[p])) break;
    used = next;
  }
  const kept = points.map((_, p) => p).filter((p) => used[p]);
  return {
    degree,
    coefficients: series(terms, slit, nX, nS),
    scatter: scatterBeyondErrors(kept.map((p) => [off[p], points[p].fwhmError])),
    nLine: kept.length,
  };
}

function series(terms: Float64Array, slit: Float64Array, nX: number, nS: number): Float64Array {
  const out = new Float64Array(slit.length * nX);
  slit.forEach((s, k) => {
    for (let i = 0; i < nX; i++) out[k * nX + i] = legendreValue(terms, s, i * nS, nS);
  });
  return out;
}

/** √(robust variance less the typical error's). */
function scatterBeyondErrors(pairs: [number, number][]): number {
  if (pairs.length === 0) return 0;
  const all = SIGMA_PER_MAD * median(pairs.map(([off]) => Math.abs(off)));
  const error = median(pairs.map((pair) => pair[1]));
  return Math.sqrt(Math.max(0, all * all - error * error));
}
