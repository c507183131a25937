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
/** Votes that are affordable: some 0.15 s. */
const BUDGET = 2e7;
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
  const voters = chooseVoters(problem, 3 * tolerance);
  const nBlock = Math.ceil((2 * LIMITS.shift) / BLOCK);
  const stretches = both(grid(LIMITS.shortest, LIMITS.longest, 2 * tolerance));
  const best: Seed[] = Array.from({ length: stretches.length * nBlock }, () => ({
    shift: 0,
    stretch: 0,
    curve: 0,
    cubic: 0,
    votes: 0,
  }));
  const place = new Float64Array(voters.t.length);
  const ballot = new Float32Array(Math.ceil((2 * LIMITS.shift) / (1.5 * tolerance)) + 1);
  for (const curve of grid(-LIMITS.curve, LIMITS.curve, 2.5 * tolerance)) {
    for (const cubic of grid(-LIMITS.cubic, LIMITS.cubic, 4 * tolerance)) {
      for (let i = 0; i < place.length; i++) place[i] = bent(voters.t[i], curve, cubic);
      stretches.forEach((stretch, s) => {
        vote(voters, place, stretch, ballot, 1.5 * tolerance);
        for (let b = 0; b + 1 < ballot.length; b++) {
          const votes = ballot[b] + ballot[b + 1];
          const shift = (b + 1) * 1.5 * tolerance - LIMITS.shift;
          const at = s * nBlock + Math.min(nBlock - 1, Math.floor((shift + LIMITS.shift) / BLOCK));
          if (votes > best[at].votes) best[at] = { shift, stretch, curve, cubic, votes };
        }
      });
    }
  }
  const seeds = best.filter((seed) => seed.votes > 0).sort((a, b) => b.votes - a.votes);
  return { seeds: seeds.slice(0, MOST_SEEDS), tolerance };
}

/** t + q P₂(t) + c P₃(t). */
export function bent(t: number, curve: number, cubic: number): number {
  return t + curve * (1.5 * t * t - 0.5) + cubic * (2.5 * t * t - 1.5) * t;
}

function vote({ u, gain }: Voters, place: Float64Array, stretch: number, ballot: Float32Array, bin: number): void {
  ballot.fill(0);
  const end = ballot.length;
  const perBin = 1 / bin;
  for (let i = 0; i < place.length; i++) {
    const zero = stretch * place[i] - LIMITS.shift;
    const row = i * u.length;
    for (let j = lowerBound(u, zero); j < u.length; j++) {
      const b = Math.trunc((u[j] - zero) * perBin);
      if (b >= end) break;
      ballot[b] += gain[row + j];
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
