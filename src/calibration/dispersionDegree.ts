/** How many terms the dispersion's surface deserves: each line in turn is left out and predicted by the others, in all fibres
 * together, since a degree too high goes through the lines it has and misses the next. Fewer terms win unless more predict
 * clearly better (cross-validation; Stone 1974, J. R. Statist. Soc. B 36, 111). */
import {
  type DispersionFrame,
  type DispersionState,
  type LinePoint,
  type Scatters,
  Surface,
  type Terms,
  termList,
} from "./dispersionSystem.js";
import { NormalEquations } from "./leastSquares.js";

/** Squares of this many times a line's expected one count little more: one wrong line must not decide. */
const cap = 400;
/** More terms must predict better by this share of the standard error of the difference over the lines. */
const clearErrors = 0.5;

interface LineSums {
  normal: NormalEquations;
  /** Σ w y² and Σ w, y what the surface is to give, Å; and the mean square that is expected of the centres' errors, Å². */
  square: number;
  weight: number;
  expected: number;
}

/** @param state solved with the most terms that come into question; its fibres' offsets are taken as they are. */
export function chooseTerms(
  frame: DispersionFrame,
  points: LinePoint[],
  state: DispersionState,
  scatters: Scatters,
  least: { nX: number; nSlit: number },
): Terms {
  const most = state.terms;
  const lines = lineSums(frame, points, state, scatters);
  const misses = (terms: Terms) => predictionMisses(lines, termSubset(most, terms));
  const terms = fewest(least.nX, most.nX, (nX) => ({ ...most, nX }), misses);
  return fewest(least.nSlit, most.nSlit, (nSlit) => ({ ...terms, nSlit }), misses);
}

function fewest(from: number, to: number, withN: (n: number) => Terms, misses: (terms: Terms) => number[]): Terms {
  const tried = Array.from({ length: to - from + 1 }, (_, i) => misses(withN(from + i)));
  const sums = tried.map((list) => list.reduce((sum, value) => sum + value, 0));
  const best = tried[sums.indexOf(Math.min(...sums))];
  const enough = tried.findIndex((list) => {
    const more = list.map((value, m) => value - best[m]);
    const mean = more.reduce((sum, value) => sum + value, 0) / more.length;
    const square = more.reduce((sum, value) => sum + (value - mean) ** 2, 0);
    return mean <= clearErrors * Math.sqrt(square / (more.length * Math.max(1, more.length - 1)));
  });
  return withN(from + Math.max(0, enough));
}

/** Which of the larger set's terms the smaller one has. */
function termSubset(most: Terms, terms: Terms): number[] {
  return termList(most).flatMap(([i, j], at) =>
    i < terms.nX && j < (i === 0 ? terms.nSlit0 : terms.nSlit) ? [at] : [],
  );
}

/** Normal equations line by line. A line's own error φ keeps its weight from growing with the number of fibres. */
function lineSums(frame: DispersionFrame, points: LinePoint[], state: DispersionState, scatters: Scatters): LineSums[] {
  const nTerm = state.surface.length;
  const all = Int32Array.from({ length: nTerm }, (_, i) => i);
  const surface = new Surface(frame, state.terms);
  const tilt = state.terms.nSlit0;
  const byLine = new Map<number, LinePoint[]>();
  for (const point of points) {
    const own = byLine.get(point.line);
    if (own === undefined) byLine.set(point.line, [point]);
    else own.push(point);
  }
  return [...byLine.values()].map((own) => {
    const normal = new NormalEquations(nTerm);
    let [total, square] = [0, 0];
    for (const point of own) {
      surface.at(state.surface, point.x - state.exposure[point.exposure] - state.offset[point.fibre], point.fibre);
      const variance = point.error * point.error + scatters.floor * scatters.floor;
      const weight = 1 / (surface.slope * surface.slope * variance);
      // Less what every candidate can follow, so that squares keep their digits.
      const y =
        frame.wavelength[point.line] - surface.row[0] * state.surface[0] - surface.row[tilt] * state.surface[tilt];
      normal.add(all, surface.row, nTerm, y, weight);
      total += weight;
      square += weight * y * y;
    }
    const share = 1 / (1 + scatters.line * scatters.line * total);
    for (let i = 0; i < normal.band.length; i++) normal.band[i] *= share;
    for (let i = 0; i < nTerm; i++) normal.right[i] *= share;
    const expected = own.length / total + scatters.line * scatters.line;
    return { normal, square: square * share, weight: total * share, expected };
  });
}

/** By line: the mean square by which the others miss it, in units of the expected one, bounded by the cap. */
function predictionMisses(lines: LineSums[], subset: number[]): number[] {
  const n = subset.length;
  const whole = new NormalEquations(n);
  for (const { normal } of lines) addPart(whole, normal, subset, 1);
  return lines.map(({ normal, square, weight, expected }) => {
    const rest = new NormalEquations(n);
    rest.band.set(whole.band);
    rest.right.set(whole.right);
    addPart(rest, normal, subset, -1);
    const solution = rest.solve();
    // Σ w (y − a·p)² = Σ w y² − 2 p·r + pᵀ N p
    const sum = square - 2 * dot(solution, normal, subset) + quadratic(solution, normal, subset);
    const ratio = Math.max(0, sum) / (weight * expected);
    return ratio / (1 + ratio / cap);
  });
}

function addPart(to: NormalEquations, from: NormalEquations, subset: number[], sign: number): void {
  for (let i = 0; i < subset.length; i++) {
    to.right[i] += sign * from.right[subset[i]];
    for (let j = 0; j <= i; j++) {
      to.band[i * to.n + i - j] += sign * from.band[subset[i] * from.n + subset[i] - subset[j]];
    }
  }
}

function dot(p: Float64Array, { right }: NormalEquations, subset: number[]): number {
  return subset.reduce((sum, at, i) => sum + p[i] * right[at], 0);
}

function quadratic(p: Float64Array, { band, n }: NormalEquations, subset: number[]): number {
  let sum = 0;
  for (let i = 0; i < subset.length; i++) {
    for (let j = 0; j <= i; j++) {
      const value = p[i] * p[j] * band[subset[i] * n + subset[i] - subset[j]];
      sum += i === j ? value : 2 * value;
    }
  }
  return sum;
}
