/** What a settled fit of a dispersion comes to, fibre by fibre: a Legendre series, its error, and what it rests on. */
import { legendreArgument, legendreFit } from "../reference/legendre.js";
import type { DroppedLine } from "./dispersionScatters.js";
import {
  type DispersionFrame,
  type DispersionState,
  type LinePoint,
  residualPixels,
  type Scatters,
  type Solved,
  Surface,
  type Terms,
} from "./dispersionSystem.js";

export interface DispersionFit {
  /** nFibre × (degree + 1), Å; NaN for fibres that are not lit. */
  degree: number;
  legendre: Float64Array;
  /** nFibre: lines used (of all exposures), rms of their residuals and standard error of the series between its outermost
   * lines, columns; NaN where there is none. */
  nLine: Int32Array;
  rms: Float64Array;
  error: Float64Array;
  seenFrom: Float64Array;
  seenTo: Float64Array;
  /** Fibres, from 0, that had too few lines and were filled from the surface. */
  filled: number[];
  /** By point: columns by which it was seen beyond where the fit has it, and whether it was used. */
  residual: Float64Array;
  used: Uint8Array;
  /** nExposure, columns: where each exposure's light lies against the first one's. */
  exposure: Float64Array;
  /** By row of the list, Å: what must be added to its wavelength, as the fit has it; NaN where not used. */
  lineError: Float64Array;
  /** Lines that all fibres alike have elsewhere than the list: a wrong wavelength there, a blend, or another line. */
  dropped: DroppedLine[];
  terms: Terms;
  scatters: Scatters;
}

/** Columns of a fibre that its error is the mean over. */
const errorColumns = 9;

/** The fit as it leaves the house. `lit`: nFibre, 1 for fibres that are to have a solution. */
export function finishDispersion(
  frame: DispersionFrame,
  points: LinePoint[],
  used: Uint8Array,
  lit: ArrayLike<number>,
  solved: Solved,
  scatters: Scatters,
  dropped: DroppedLine[],
): DispersionFit {
  const { state } = solved;
  const { nFibre } = frame;
  const residual = residualPixels(frame, state, points).map((value) => -value);
  const nan = () => new Float64Array(nFibre).fill(Number.NaN);
  const own = points.map((_, p) => p).filter((p) => used[p] === 1);
  const byFibre = Array.from({ length: nFibre }, (): number[] => []);
  for (const p of own) byFibre[points[p].fibre].push(p);
  const nLine = Int32Array.from(byFibre, (list) => list.length);
  const [rms, seenFrom, seenTo, error] = [nan(), nan(), nan(), nan()];
  const seen = [...nLine.keys()].filter((k) => nLine[k] > 0);
  const covariance = solved.covariance();
  const filled: number[] = [];
  const nCoef = state.terms.nX;
  const surface = new Surface(frame, state.terms);
  const legendre = new Float64Array(nFibre * nCoef).fill(Number.NaN);
  for (let k = 0; k < nFibre; k++) {
    if (lit[k] === 0) continue;
    if (nLine[k] === 0) filled.push(k);
    else rms[k] = Math.sqrt(byFibre[k].reduce((sum, p) => sum + residual[p] ** 2, 0) / nLine[k]);
    const source = nLine[k] > 0 ? k : seen.reduce((a, b) => (Math.abs(b - k) < Math.abs(a - k) ? b : a));
    const columns = byFibre[source].map((p) => points[p].x);
    seenFrom[k] = Math.min(...columns);
    seenTo[k] = Math.max(...columns);
    legendre.set(fibreSeries(frame, state, surface, k), k * nCoef);
    error[k] = fibreError(solved, surface, covariance, k, seenFrom[k], seenTo[k]);
  }
  const lines = new Set(own.map((p) => points[p].line));
  return {
    ...{ degree: nCoef - 1, legendre, nLine, rms, error, seenFrom, seenTo, filled, residual, used },
    exposure: state.exposure,
    lineError: state.lineError.map((value, line) => (lines.has(line) ? value : Number.NaN)),
    ...{ dropped, terms: state.terms, scatters },
  };
}

/** The surface along one fibre, moved by its own offset: a polynomial in x again, fixed by as many values as it has terms. */
function fibreSeries(frame: DispersionFrame, state: DispersionState, surface: Surface, fibre: number): Float64Array {
  const nCoef = state.terms.nX;
  const x = Array.from({ length: nCoef }, (_, i) => (i * (frame.nx - 1)) / (nCoef - 1));
  const wavelength = x.map((column) => {
    surface.at(state.surface, column - state.offset[fibre], fibre);
    return surface.wavelength;
  });
  const t = x.map((column) => legendreArgument(column, frame.nx));
  return legendreFit(t, wavelength, new Float64Array(nCoef).fill(1), nCoef);
}

/** √ of the mean variance of the series between two columns, columns: the surface's, the fibre's own offset's, and what they
 * share. */
function fibreError(
  { state, coupling, offsetVariance, nUnknown }: Solved,
  surface: Surface,
  covariance: Float64Array,
  fibre: number,
  from: number,
  to: number,
): number {
  let sum = 0;
  const gradient = new Float64Array(nUnknown);
  for (let c = 0; c < errorColumns; c++) {
    const x = from + ((to - from) * c) / (errorColumns - 1) - state.offset[fibre];
    surface.at(state.surface, x, fibre);
    const { slope, row } = surface;
    // λ = S(x − δ), and δ follows the other unknowns by −coupling.
    for (let i = 0; i < nUnknown; i++) gradient[i] = slope * coupling[fibre * nUnknown + i];
    for (let i = 0; i < row.length; i++) gradient[i] += row[i];
    sum += quadraticForm(gradient, covariance) / (slope * slope) + offsetVariance[fibre];
  }
  return Math.sqrt(sum / errorColumns);
}

function quadraticForm(v: Float64Array, matrix: Float64Array): number {
  const n = v.length;
  let sum = 0;
  for (let i = 0; i < n; i++) {
    let row = 0;
    for (let j = 0; j < n; j++) row += matrix[i * n + j] * v[j];
    sum += v[i] * row;
  }
  return sum;
}
