/** From centred and identified lines to a wavelength scale for every fibre: the joint fit of dispersionSystem.ts, its terms
 * chosen by the data, lines and points that cannot be true left out in turns, and the result as one Legendre series a fibre. */
import { SIGMA_PER_MAD } from "../detector/clip.js";
import { legendreArgument, legendreFit } from "../reference/legendre.js";
import { median } from "../reference/median.js";
import { chooseTerms } from "./dispersionDegree.js";
import {
  type DispersionFrame,
  type DispersionState,
  type LinePoint,
  residualPixels,
  type Scatters,
  type Solved,
  Surface,
  solveDispersion,
  type Terms,
  termList,
} from "./dispersionSystem.js";
import { CalibrationError } from "./errors.js";
import { NormalEquations } from "./leastSquares.js";

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

export interface DroppedLine {
  line: number;
  /** Å by which it was seen above its wavelength in the list. */
  off: number;
  nFibre: number;
}

/** A fibre with fewer lines is filled from its neighbours. */
const fewestInFibre = 3;
/** Lines without which there is no dispersion. */
const fewestLines = 4;
const kappa = 5;
const lineKappa = 5;
const maxTurns = 12;
/** What list wavelengths are first taken to be good to, columns, and an error that is never worth dropping a line for. */
const startLinePixels = 0.03;
const leastLinePixels = 0.01;
const mostX = 8;
const mostSlit = 5;
const mostSlit0 = 7;
/** Nothing is known better than this: columns, columns, Å. */
const leastFibreScatter = 0.001;
const leastFloor = 0.0003;
const leastLineScatter = 0.0005;
/** Columns of a fibre that its error is the mean over. */
const errorColumns = 9;

/** @param lit nFibre, 1 for fibres that are to have a solution. @param rough take five terms in x and three along the slit at the
 * most, which is enough to find lines by.
 * @throws CalibrationError when the lines are too few. */
export function fitDispersion(
  frame: DispersionFrame,
  points: LinePoint[],
  lit: ArrayLike<number>,
  rough = false,
): DispersionFit {
  const fit = new Fit(frame, points);
  const most = mostTerms(frame, fit.kept(), fit.nLine());
  fit.start({ nX: Math.min(5, most.nX), nSlit0: Math.min(4, most.nSlit0), nSlit: Math.min(3, most.nSlit) });
  fit.settle();
  if (!rough) {
    fit.withTerms(most);
    fit.solve();
    fit.chooseTerms();
    // What few terms took for wrong may be right.
    fit.restore();
    fit.settle();
  }
  return finish(frame, points, fit.used, lit, fit.solve(), fit.scatters, fit.dropped);
}

/** The fit in the making. */
class Fit {
  used: Uint8Array;
  scatters: Scatters = { fibre: 0.3, line: 0, floor: 0.005, scale: 1 };
  dropped: DroppedLine[] = [];
  private state: DispersionState;

  constructor(
    private readonly frame: DispersionFrame,
    private readonly points: LinePoint[],
  ) {
    this.used = withoutSparse(points, new Uint8Array(points.length).fill(1));
    const nLine = this.nLine();
    if (nLine < fewestLines) {
      throw new CalibrationError(
        `Only ${nLine} identified lines can be used for the wavelength scale, but at least ${fewestLines} are needed, better 10 or more; add lamps, expose longer, or widen the range.`,
      );
    }
    this.state = firstState(frame, this.kept());
  }

  kept(): LinePoint[] {
    return this.points.filter((_, p) => this.used[p] === 1);
  }

  nLine(): number {
    return new Set(this.kept().map(({ line }) => line)).size;
  }

  start(terms: Terms): void {
    this.withTerms(terms);
    this.scatters.line = startLinePixels * slopeOf(this.frame, this.state);
  }

  withTerms(terms: Terms): void {
    const before = new Map(termList(this.state.terms).map(([i, j], at) => [`${i} ${j}`, this.state.surface[at]]));
    const surface = Float64Array.from(termList(terms), ([i, j]) => before.get(`${i} ${j}`) ?? 0);
    this.state = { ...this.state, terms, surface };
  }

  solve(): Solved {
    const solved = solveDispersion(this.frame, this.kept(), this.state, this.scatters);
    this.state = solved.state;
    return solved;
  }

  /** Lines and points that cannot be true left out in turns, scatters estimated anew, until nothing changes. */
  settle(): void {
    for (let turn = 0; turn < maxTurns; turn++) {
      const { frame, points, used } = this;
      const solved = this.solve();
      this.scatters = estimateScatters(frame, points, used, this.state, solved, this.scatters);
      const wrong = wrongLines(frame, this.kept(), this.state, this.scatters);
      for (const { line } of wrong) this.state.lineError[line] = 0;
      this.dropped.push(...wrong);
      const next = withoutSparse(points, clipped(frame, points, this.state, this.scatters, this.dropped));
      const same = next.every((value, p) => value === used[p]);
      this.used = next;
      if (same && wrong.length === 0) return;
    }
  }

  chooseTerms(): void {
    const { terms } = this.state;
    const least = { nX: Math.min(3, terms.nX), nSlit: 1 };
    this.withTerms(chooseTerms(this.frame, this.kept(), this.state, this.scatters, least));
  }

  /** Dropped lines and clipped points take part again. */
  restore(): void {
    const { points } = this;
    const back = new Set(this.dropped.map(({ line }) => line));
    this.dropped = [];
    // A dropped line has no error of its own yet by which its points could be judged.
    const near = clipped(this.frame, points, this.state, this.scatters, []);
    this.used = withoutSparse(
      points,
      near.map((value, p) => (back.has(points[p].line) ? 1 : value)),
    );
  }
}

/** As many terms as the lines and fibres can bear. */
function mostTerms({ nFibre }: DispersionFrame, points: LinePoint[], nLine: number): Terms {
  const nSeen = new Set(points.map(({ fibre }) => fibre)).size;
  const slitTerms = (most: number) => Math.max(1, Math.min(most, Math.floor(nSeen / 4), nFibre));
  return {
    nX: Math.max(2, Math.min(mostX, Math.floor(nLine / 2))),
    nSlit0: slitTerms(mostSlit0),
    nSlit: slitTerms(mostSlit),
  };
}

/** Ordinary least squares for the surface alone, of few terms. */
function firstState(frame: DispersionFrame, points: LinePoint[]): DispersionState {
  const nSeen = new Set(points.map(({ fibre }) => fibre)).size;
  const nLine = new Set(points.map(({ line }) => line)).size;
  const terms = { nX: Math.min(4, Math.floor(nLine / 2)), nSlit0: Math.min(4, nSeen), nSlit: Math.min(2, nSeen) };
  const n = termList(terms).length;
  const state: DispersionState = {
    terms,
    surface: new Float64Array(n),
    offset: new Float64Array(frame.nFibre),
    exposure: new Float64Array(frame.nExposure),
    lineError: new Float64Array(frame.wavelength.length),
  };
  const normal = new NormalEquations(n);
  const index = Int32Array.from({ length: n }, (_, i) => i);
  const surface = new Surface(frame, terms);
  for (const { x, fibre, line } of points) {
    surface.at(state.surface, x, fibre);
    normal.add(index, surface.row, n, frame.wavelength[line], 1);
  }
  return { ...state, surface: normal.solve() };
}

/** Å per column in the middle, without its sign. */
function slopeOf(frame: DispersionFrame, { terms, surface }: DispersionState): number {
  const model = new Surface(frame, terms);
  model.at(surface, (frame.nx - 1) / 2, Math.floor(frame.nFibre / 2));
  return Math.abs(model.slope);
}

/** Points of fibres with too few lines are left out: nothing would check them. */
function withoutSparse(points: LinePoint[], used: Uint8Array): Uint8Array {
  const lines = new Map<number, Set<number>>();
  points.forEach(({ fibre, line }, p) => {
    if (used[p] === 1) lines.set(fibre, (lines.get(fibre) ?? new Set()).add(line));
  });
  return used.map((value, p) => ((lines.get(points[p].fibre)?.size ?? 0) < fewestInFibre ? 0 : value));
}

/** Robust scatter of centres, of fibres' offsets and of lines' errors. */
function estimateScatters(
  frame: DispersionFrame,
  points: LinePoint[],
  used: Uint8Array,
  state: DispersionState,
  { offsetVariance }: Solved,
  before: Scatters,
): Scatters {
  const kept = points.filter((_, p) => used[p] === 1);
  const off = Array.from(residualPixels(frame, state, kept));
  const errors = kept.map(({ error }) => error);
  const typical = median(errors);
  const bright = [...off.keys()].filter((p) => errors[p] <= typical);
  const spread = SIGMA_PER_MAD * median(bright.map((p) => Math.abs(off[p])));
  const expected = median(bright.map((p) => errors[p]));
  const floor = Math.sqrt(Math.max(leastFloor * leastFloor, spread * spread - expected * expected));
  const scaled = off.map((value, p) => Math.abs(value) / Math.sqrt(errors[p] * errors[p] + floor * floor));
  const fibres = [...new Set(kept.map(({ fibre }) => fibre))];
  const ownSquare = (SIGMA_PER_MAD * median(fibres.map((k) => Math.abs(state.offset[k])))) ** 2;
  const known = median(fibres.map((k) => offsetVariance[k]));
  const lines = [...lineMeans(frame, kept, state, before).values()];
  const spare = lines.length / Math.max(1, lines.length - state.terms.nX);
  const lineSquare = spare * (SIGMA_PER_MAD * median(lines.map(({ off: seen }) => Math.abs(seen)))) ** 2;
  const lineKnown = median(lines.map(({ variance }) => variance));
  return {
    fibre: fibres.length < 4 ? before.fibre : Math.sqrt(Math.max(leastFibreScatter ** 2, ownSquare + known)),
    line: Math.sqrt(Math.max(leastLineScatter ** 2, lineSquare - lineKnown)),
    floor,
    scale: Math.max(1, SIGMA_PER_MAD * median(scaled)),
  };
}

/** By line: Å by which all fibres together see it above its wavelength in the list, and the variance of that. */
function lineMeans(
  frame: DispersionFrame,
  points: LinePoint[],
  { surface, terms, offset, exposure }: DispersionState,
  { floor, scale }: Scatters,
): Map<number, { off: number; variance: number; fibres: Set<number> }> {
  const model = new Surface(frame, terms);
  const sums = new Map<number, { weight: number; moment: number; fibres: Set<number> }>();
  for (const point of points) {
    model.at(surface, point.x - exposure[point.exposure] - offset[point.fibre], point.fibre);
    const sum = sums.get(point.line) ?? { weight: 0, moment: 0, fibres: new Set() };
    const weight = 1 / ((point.error ** 2 + floor * floor) * (scale * model.slope) ** 2);
    sum.weight += weight;
    sum.moment += weight * (model.wavelength - frame.wavelength[point.line]);
    sum.fibres.add(point.fibre);
    sums.set(point.line, sum);
  }
  return new Map(
    Array.from(sums, ([line, { weight, moment, fibres }]) => [
      line,
      { off: moment / weight, variance: 1 / weight, fibres },
    ]),
  );
}

/** Lines that are off beyond doubt: the worst, and those that are half as bad. */
function wrongLines(
  frame: DispersionFrame,
  points: LinePoint[],
  state: DispersionState,
  scatters: Scatters,
): DroppedLine[] {
  const means = lineMeans(frame, points, state, scatters);
  const lines = [...means.keys()].sort((a, b) => Math.abs(means.get(b)!.off) - Math.abs(means.get(a)!.off));
  const spare = Math.max(0, lines.length - Math.max(fewestLines, state.terms.nX + 2));
  const least = Math.max(leastLinePixels * slopeOf(frame, state), Math.abs(means.get(lines[0])!.off) / 2);
  const wrong = lines.filter((line) => {
    const { off, variance } = means.get(line)!;
    return Math.abs(off) >= least && off * off > lineKappa * lineKappa * (scatters.line ** 2 + variance);
  });
  return wrong.slice(0, spare).map((line) => {
    const { off, fibres } = means.get(line)!;
    return { line, off, nFibre: fibres.size };
  });
}

function clipped(
  frame: DispersionFrame,
  points: LinePoint[],
  state: DispersionState,
  { floor, scale }: Scatters,
  dropped: DroppedLine[],
): Uint8Array {
  const out = new Set(dropped.map(({ line }) => line));
  const residual = residualPixels(frame, state, points);
  return Uint8Array.from(points, ({ line, error }, p) => {
    const limit = kappa * scale * Math.sqrt(error * error + floor * floor);
    return !out.has(line) && Math.abs(residual[p]) <= limit ? 1 : 0;
  });
}

function finish(
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
