/** From centred and identified lines to a wavelength scale for every fibre: the joint fit of dispersionSystem.ts, its terms
 * chosen by the data, lines and points that cannot be true left out in turns, and the result as one Legendre series a fibre. */
import { chooseTerms } from "./dispersionDegree.js";
import {
  clipped,
  type DroppedLine,
  estimateScatters,
  fewestLines,
  slopeOf,
  withoutSparse,
  wrongLines,
} from "./dispersionScatters.js";
import { type DispersionFit, finishDispersion } from "./dispersionSeries.js";
import {
  type DispersionFrame,
  type DispersionState,
  type LinePoint,
  type Scatters,
  type Solved,
  Surface,
  solveDispersion,
  type Terms,
  termList,
} from "./dispersionSystem.js";
import { CalibrationError } from "./errors.js";
import { NormalEquations } from "./leastSquares.js";

export type { DroppedLine } from "./dispersionScatters.js";
export type { DispersionFit } from "./dispersionSeries.js";

const maxTurns = 12;
/** What list wavelengths are first taken to be good to, columns. */
const startLinePixels = 0.03;
const mostX = 8;
const mostSlit = 5;
const mostSlit0 = 7;
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
  return finishDispersion(frame, points, fit.used, lit, fit.solve(), fit.scatters, fit.dropped);
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
