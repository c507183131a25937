/** The joint fit of all fibres' lines:
 *
 *     λ_m + b_m = S(x − e_n − δ_k, s_k),   S(x, s) = Σ c_ij P_i(x) P_j(s)
 *
 * a line m seen at column x by fibre k, at place s_k along the slit, in exposure n. Unknown are the surface c, each fibre's own
 * offset δ_k (columns: fibres do not sit perfectly in the slit), each exposure's e_n (columns; the first has none), and each
 * line's own error b_m (Å: list wavelengths have errors, which all fibres share, so that a thousand fibres do not make a
 * line better known). δ and b are drawn from normal distributions of widths τ and φ, which are estimated from them
 * (random effects; Searle, Casella & McCulloch, Variance Components, chapter 3): a fibre with few lines leans on its neighbours
 * exactly as far as it should. By Gauss's and Newton's method, each fibre's δ eliminated from the normal equations. */
import { legendreArgument, legendreBasis } from "../reference/legendre.js";
import { NormalEquations } from "./leastSquares.js";

/** One line seen by one fibre. */
export interface LinePoint {
  /** From 0. */
  fibre: number;
  exposure: number;
  /** Row of the list. */
  line: number;
  /** Column, and its standard error. */
  x: number;
  error: number;
}

export interface DispersionFrame {
  nFibre: number;
  nx: number;
  /** nFibre: places along the slit on [−1, 1]. */
  slit: Float64Array;
  nExposure: number;
  /** Å, by row of the list. */
  wavelength: ArrayLike<number>;
}

/** Terms P_i(x)·P_j(s) of the surface: slit terms of the zero point, of all higher ones, and terms in x. */
export interface Terms {
  nX: number;
  nSlit0: number;
  nSlit: number;
}

export interface Scatters {
  /** τ, columns. */
  fibre: number;
  /** φ, Å. */
  line: number;
  /** What centres scatter beyond their errors, columns; and the factor that is still missing then. */
  floor: number;
  scale: number;
}

export interface DispersionState {
  terms: Terms;
  /** [term] Å */
  surface: Float64Array;
  /** nFibre, columns. */
  offset: Float64Array;
  /** nExposure, columns; the first is 0. */
  exposure: Float64Array;
  /** By row of the list, Å; 0 where not seen. */
  lineError: Float64Array;
}

export function termList({ nX, nSlit0, nSlit }: Terms): [number, number][] {
  return Array.from({ length: nX }, (_, i) => i).flatMap((i) =>
    Array.from({ length: i === 0 ? nSlit0 : nSlit }, (_, j): [number, number] => [i, j]),
  );
}

/** Values of the surface, place by place. What `at` fills is overwritten by the next call. */
export class Surface {
  /** Å, and Å per column. */
  wavelength = 0;
  slope = 0;
  /** P_i(x)·P_j(s) of each term. */
  readonly row: Float64Array;
  private readonly along: Float64Array;
  private readonly alongSlope: Float64Array;
  private readonly across: Float64Array[];

  constructor(
    private readonly frame: DispersionFrame,
    private readonly terms: Terms,
  ) {
    this.row = new Float64Array(termList(terms).length);
    this.along = new Float64Array(terms.nX);
    this.alongSlope = new Float64Array(terms.nX);
    const nAcross = Math.max(terms.nSlit0, terms.nSlit);
    this.across = Array.from(frame.slit, (s) => legendreBasis(s, nAcross));
  }

  at(coefficients: Float64Array, x: number, fibre: number): void {
    const { along, alongSlope, row, terms } = this;
    this.basis(x);
    const across = this.across[fibre];
    let [wavelength, slope, at] = [0, 0, 0];
    for (let i = 0; i < terms.nX; i++) {
      const nSlit = i === 0 ? terms.nSlit0 : terms.nSlit;
      for (let j = 0; j < nSlit; j++, at++) {
        row[at] = along[i] * across[j];
        wavelength += coefficients[at] * row[at];
        slope += coefficients[at] * alongSlope[i] * across[j];
      }
    }
    this.wavelength = wavelength;
    this.slope = slope;
  }

  /** P_0 … P_{n−1}, and their derivatives by P'_{j+1} = P'_{j−1} + (2j + 1) P_j (Abramowitz & Stegun 22.8.5 and 22.7.10). */
  private basis(x: number): void {
    const { along, alongSlope, frame, terms } = this;
    const t = legendreArgument(x, frame.nx);
    const perColumn = frame.nx > 1 ? 2 / (frame.nx - 1) : 0;
    along[0] = 1;
    alongSlope[0] = 0;
    if (terms.nX > 1) {
      along[1] = t;
      alongSlope[1] = perColumn;
    }
    for (let j = 1; j + 1 < terms.nX; j++) {
      along[j + 1] = ((2 * j + 1) * t * along[j] - j * along[j - 1]) / (j + 1);
      alongSlope[j + 1] = alongSlope[j - 1] + (2 * j + 1) * along[j] * perColumn;
    }
  }
}

/** Columns from where each point was seen to where the fit has it. */
export function residualPixels(frame: DispersionFrame, state: DispersionState, points: LinePoint[]): Float64Array {
  const surface = new Surface(frame, state.terms);
  return Float64Array.from(points, (point) => {
    surface.at(state.surface, point.x - state.exposure[point.exposure] - state.offset[point.fibre], point.fibre);
    return (frame.wavelength[point.line] + state.lineError[point.line] - surface.wavelength) / surface.slope;
  });
}

/** Solved normal equations, for errors. */
export interface Solved {
  state: DispersionState;
  /** Of surface, exposures from the second on, and lines in the order of `lines`; all fibres' offsets eliminated. */
  covariance: () => Float64Array;
  /** nFibre × nUnknown: v_k / D_k, and 1/D_k: what was eliminated. */
  coupling: Float64Array;
  offsetVariance: Float64Array;
  nUnknown: number;
}

const maxRounds = 8;
/** A round that moves no offset by more columns is the last. */
const settledPixels = 1e-5;

/** From `start` to the least squares, through the points in `use`. */
export function solveDispersion(
  frame: DispersionFrame,
  points: LinePoint[],
  start: DispersionState,
  scatters: Scatters,
): Solved {
  const lines = [...new Set(points.map(({ line }) => line))].sort((a, b) => a - b);
  const column = new Map(lines.map((line, i) => [line, i]));
  let solved = step(frame, points, column, start, scatters);
  for (let round = 1; round < maxRounds && solved.moved > settledPixels; round++) {
    solved = step(frame, points, column, solved.state, scatters);
  }
  return solved;
}

function step(
  frame: DispersionFrame,
  points: LinePoint[],
  column: Map<number, number>,
  state: DispersionState,
  scatters: Scatters,
): Solved & { moved: number } {
  const { surface, exposure } = state;
  const nSurface = surface.length;
  const lineFrom = nSurface + frame.nExposure - 1;
  const nUnknown = lineFrom + column.size;
  const normal = new NormalEquations(nUnknown);
  const coupling = new Float64Array(frame.nFibre * nUnknown);
  const diagonal = new Float64Array(frame.nFibre).fill(1 / (scatters.fibre * scatters.fibre));
  const right = diagonal.map((weight, k) => -weight * state.offset[k]);
  const index = new Int32Array(nSurface + 2);
  const values = new Float64Array(nSurface + 2);
  for (let i = 0; i < nSurface; i++) index[i] = i;
  const model = new Surface(frame, state.terms);
  for (const point of points) {
    model.at(surface, point.x - exposure[point.exposure] - state.offset[point.fibre], point.fibre);
    const { wavelength, slope, row } = model;
    const variance = (point.error * point.error + scatters.floor * scatters.floor) * scatters.scale * scatters.scale;
    const weight = 1 / (slope * slope * variance);
    const y = frame.wavelength[point.line] + state.lineError[point.line] - wavelength;
    values.set(row);
    let n = nSurface;
    if (point.exposure > 0) {
      index[n] = nSurface + point.exposure - 1;
      values[n++] = -slope;
    }
    index[n] = lineFrom + column.get(point.line)!;
    values[n++] = -1;
    normal.add(index, values, n, y, weight);
    const own = point.fibre * nUnknown;
    for (let i = 0; i < n; i++) coupling[own + index[i]] -= weight * slope * values[i];
    diagonal[point.fibre] += weight * slope * slope;
    right[point.fibre] -= weight * slope * y;
  }
  for (const [line, i] of column) {
    normal.addPrior(lineFrom + i, -state.lineError[line], 1 / (scatters.line * scatters.line));
  }
  eliminate(normal, coupling, diagonal, right);
  const solution = normal.solve();
  const next = moved(frame, state, column, solution, { coupling, diagonal, right });
  for (let k = 0; k < frame.nFibre; k++) {
    for (let i = 0; i < nUnknown; i++) coupling[k * nUnknown + i] /= diagonal[k];
  }
  return {
    ...next,
    covariance: () => normal.inverse(),
    coupling,
    offsetVariance: diagonal.map((value) => 1 / value),
    nUnknown,
  };
}

/** Schur's complement of the fibres' own offsets. */
function eliminate(normal: NormalEquations, coupling: Float64Array, diagonal: Float64Array, right: Float64Array): void {
  const { n } = normal;
  const all = Int32Array.from({ length: n }, (_, i) => i);
  diagonal.forEach((weight, k) => {
    normal.add(all, coupling.subarray(k * n, (k + 1) * n), n, right[k], -1 / weight);
  });
}

function moved(
  frame: DispersionFrame,
  state: DispersionState,
  column: Map<number, number>,
  solution: Float64Array,
  { coupling, diagonal, right }: { coupling: Float64Array; diagonal: Float64Array; right: Float64Array },
): { state: DispersionState; moved: number } {
  const n = solution.length;
  const nSurface = state.surface.length;
  const lineFrom = nSurface + frame.nExposure - 1;
  let largest = 0;
  const offset = state.offset.map((value, k) => {
    let sum = right[k];
    for (let i = 0; i < n; i++) sum -= coupling[k * n + i] * solution[i];
    largest = Math.max(largest, Math.abs(sum / diagonal[k]));
    return value + sum / diagonal[k];
  });
  const exposure = state.exposure.map((value, i) => {
    if (i === 0) return 0;
    largest = Math.max(largest, Math.abs(solution[nSurface + i - 1]));
    return value + solution[nSurface + i - 1];
  });
  const lineError = state.lineError.slice();
  for (const [line, i] of column) lineError[line] += solution[lineFrom + i];
  const surface = state.surface.map((value, i) => value + solution[i]);
  return { state: { ...state, surface, offset, exposure, lineError }, moved: largest };
}
