/** All readings of an arc within its limits, coarsely: for each direction, stretch and bend every pair of a peak and a line votes for the shift
 * that would bring them together (Hough 1962), with the logarithm of how much more likely the pair is than chance. */
import { log } from "../reference/log.js";
import { type ArcProblem, brightnessRatio, LIMITS } from "./arcProblem.js";

/** A place to refine from: u = shift + stretch · (t + curve P₂ + cubic P₃), within about `tolerance` (in t). */
export interface Seed {
  shift: number;
  stretch: number;
  curve: number;
  cubic: number;
  votes: number;
}

/** Brightest peaks, readiest lines that vote. */
const MOST_PEAKS = 50;
const MOST_LINES = 150;
const MOST_SEEDS = 500;
/** Votes that are affordable: some 0.1 s. */
const BUDGET = 1e7;
/** px: no finer than this. */
const FINEST = 0.8;
const COARSEST = 0.008;
/** Share of the peaks taken to be listed lines. */
const LISTED = 0.7;
/** Width of a place on the shift's axis of which only the best vote is kept. */
const BLOCK = 0.05;

interface Voters {
  t: Float64Array;
  u: Float64Array;
  /** nPeak × nLine */
  gain: Float32Array;
}

export function searchArc(problem: ArcProblem): { seeds: Seed[]; tolerance: number } {
  const tolerance = affordable(problem);
  const bin = 1.5 * tolerance;
  const voters = chooseVoters(problem, 2 * bin);
  const stretches = both(grid(LIMITS.shortest, LIMITS.longest, 2 * tolerance));
  const bends = grid(-LIMITS.curve, LIMITS.curve, 2.5 * tolerance).flatMap((curve) =>
    grid(-LIMITS.cubic, LIMITS.cubic, 4 * tolerance).map((cubic) => ({ curve, cubic })),
  );
  const place = new Float64Array(voters.t.length);
  const ballot = new Float32Array(Math.ceil((2 * LIMITS.shift) / bin) + 1);
  const perBlock = Math.max(1, Math.round(BLOCK / bin));
  const nBlock = Math.ceil(ballot.length / perBlock);
  // Of each stretch and block: the most votes, with which shift and which bends.
  const most = new Float32Array(stretches.length * nBlock);
  const mostAt = new Int32Array(2 * most.length);
  bends.forEach(({ curve, cubic }, bend) => {
    for (let i = 0; i < place.length; i++) place[i] = bent(voters.t[i], curve, cubic);
    for (let s = 0; s < stretches.length; s++) {
      vote(voters, place, stretches[s], ballot, bin);
      for (let b = 0; b + 1 < ballot.length; b++) {
        const votes = ballot[b] + ballot[b + 1];
        const at = s * nBlock + Math.trunc(b / perBlock);
        if (votes <= most[at]) continue;
        most[at] = votes;
        mostAt[2 * at] = b;
        mostAt[2 * at + 1] = bend;
      }
    }
  });
  const order = Array.from(most.keys()).filter((at) => most[at] > 0);
  order.sort((a, b) => most[b] - most[a] || a - b);
  const seeds = order.slice(0, MOST_SEEDS).map((at) => ({
    shift: (mostAt[2 * at] + 1) * bin - LIMITS.shift,
    stretch: stretches[Math.floor(at / nBlock)],
    ...bends[mostAt[2 * at + 1]],
    votes: most[at],
  }));
  return { seeds, tolerance };
}

/** t + q P₂(t) + c P₃(t). */
export function bent(t: number, curve: number, cubic: number): number {
  return t + curve * (1.5 * t * t - 0.5) + cubic * (2.5 * t * t - 1.5) * t;
}

/** Votes of all pairs on the shift's axis, in bins. */
function vote({ u, gain }: Voters, place: Float64Array, stretch: number, ballot: Float32Array, bin: number): void {
  ballot.fill(0);
  const nLine = u.length;
  const end = LIMITS.shift + LIMITS.shift;
  const perBin = 1 / bin;
  for (let i = 0; i < place.length; i++) {
    const zero = stretch * place[i] - LIMITS.shift;
    const stop = zero + end;
    const row = i * nLine;
    for (let j = lowerBound(u, zero); j < nLine; j++) {
      const here = u[j];
      if (here >= stop) break;
      ballot[((here - zero) * perBin) | 0] += gain[row + j];
    }
  }
}

/** First index whose value is not below. */
export function lowerBound(rising: Float64Array, value: number): number {
  let low = 0;
  let high = rising.length;
  while (low < high) {
    const middle = (low + high) >> 1;
    if (rising[middle] < value) low = middle + 1;
    else high = middle;
  }
  return low;
}

/** The finest tolerance (in t) whose search stays within the budget: the number of readings goes with its inverse cube. */
function affordable({ t, u, pixel }: ArcProblem): number {
  const span = LIMITS.longest - LIMITS.shortest;
  const readings = (2 * span * 2 * LIMITS.curve * 2 * LIMITS.cubic) / (2 * 2.5 * 4);
  const pairs = 0.4 * Math.min(t.length, MOST_PEAKS) * Math.min(u.length, MOST_LINES) + 200;
  const finest = cubeRoot((readings * pairs) / BUDGET);
  return Math.min(COARSEST, Math.max(FINEST * pixel, finest));
}

function chooseVoters(problem: ArcProblem, window: number): Voters {
  const peaks = topOf(problem.peakRank, MOST_PEAKS);
  const lines = topOf(problem.weight, MOST_LINES);
  const t = Float64Array.from(peaks, (i) => problem.t[i]);
  const u = Float64Array.from(lines, (j) => problem.u[j]);
  const gain = new Float32Array(t.length * u.length);
  const reach = (u[u.length - 1] - u[0]) / window;
  peaks.forEach((peak, i) => {
    lines.forEach((line, j) => {
      const ratio = problem.weight[line] * brightnessRatio(problem.peakRank[peak], problem.lineRank[line]);
      gain[i * u.length + j] = log(1 + ((LISTED / (1 - LISTED)) * ratio * reach) / u.length);
    });
  });
  return { t, u, gain };
}

/** Indices of the greatest values, in rising order. */
function topOf(values: Float64Array, most: number): number[] {
  const order = Array.from(values.keys()).sort((a, b) => values[b] - values[a] || a - b);
  return order.slice(0, most).sort((a, b) => a - b);
}

/** From end to end, both included, in equal steps no longer than `step`. */
function grid(from: number, to: number, step: number): number[] {
  const n = Math.max(1, Math.ceil((to - from) / step));
  return Array.from({ length: n + 1 }, (_, i) => from + ((to - from) * i) / n);
}

function both(values: number[]): number[] {
  return [...values, ...values.map((value) => -value)];
}

/** Good to a thousandth, which is all that a budget needs (Newton). */
function cubeRoot(x: number): number {
  let root = 0.005;
  for (let i = 0; i < 30; i++) root = (2 * root + x / (root * root)) / 3;
  return root;
}
