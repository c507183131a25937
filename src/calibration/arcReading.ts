/** One reading of an arc: a cubic u(t) through peaks and their lines, refined from a rough place, and what speaks for it.
 *
 * Peaks are a Poisson process along x: a share m of them lie at listed lines, each as likely seen as its weight says, the others anywhere.
 * Against peaks that lie anywhere, a reading that puts M of n peaks within ±τ px of lines has the log-likelihood ratio
 *
 *     Λ = Σ_matched ln(1 − m + m · w_j r_ij · nx / (2τ Σ w)) + (n − M) ln(1 − m),    m = M/n,
 *
 * Σ w over the lines in the frame, r_ij of brightnesses. Chance reaches Λ with a probability of at most e^−Λ (Markov's inequality) a reading,
 * and there are V(τ) readings apart by more than τ within the limits: what counts is Λ − ln V(τ), nats. */
import { factorBand, solveBand } from "../reference/banded.js";
import { log } from "../reference/log.js";
import { type ArcProblem, brightnessRatio, LIMITS } from "./arcProblem.js";
import { bent, lowerBound } from "./arcSearch.js";

export interface Reading {
  /** u = a₀ + a₁ [t + q P₂(t) + c P₃(t)]. */
  shift: number;
  stretch: number;
  curve: number;
  cubic: number;
  /** nPeak: index of the line in the problem, or −1. */
  line: Int32Array;
  nMatch: number;
  /** px: τ. */
  tolerance: number;
  /** Λ − ln V, nats. */
  score: number;
}

type Curve = Pick<Reading, "shift" | "stretch" | "curve" | "cubic">;

/** px, at 1024 columns; wider frames have wider lines. */
const TOLERANCES = [0.3, 0.6, 1.2];
const ROUNDS_AT_END = 3;
/** How far a reading may move beyond the limits, so that one that begins inside does not stop halfway. */
const BEYOND = 0.1;
/** Outermost matches that are left out together, and matches that must be left. */
const MOST_AT_END = 5;
const LEFT_AT_LEAST = 4;
/** ln 1/1000. */
const RARE = -6.9;

export function readingAt(curve: Curve, t: number): number {
  return curve.shift + curve.stretch * bent(t, curve.curve, curve.cubic);
}

/** px in which a reading's matches may lie off: centring errors and what a cubic cannot follow. */
export function finestTolerance({ nx }: ArcProblem): number {
  return TOLERANCES[0] * Math.max(1, nx / 2048);
}

/** The best reading near a seed, which is right within `tolerance` (in t). */
export function refineReading(problem: ArcProblem, seed: Curve, tolerance: number): Reading {
  const scale = finestTolerance(problem) / TOLERANCES[0];
  const line = new Int32Array(problem.t.length);
  let curve: Curve = seed;
  let best: Reading | undefined;
  const widths = shrinking(tolerance / problem.pixel, TOLERANCES[2] * scale);
  for (const width of widths) curve = follow(problem, curve, width, line);
  for (const width of [...TOLERANCES].reverse().map((px) => px * scale)) {
    for (let round = 0; round < ROUNDS_AT_END; round++) curve = follow(problem, curve, width, line);
    const nMatch = matchLines(problem, curve, width, line);
    const score = scoreOf(problem, curve, width, line, nMatch);
    if (best === undefined || score > best.score) {
      best = { ...curve, line: line.slice(), nMatch, tolerance: width, score };
    }
  }
  return best as Reading;
}

function shrinking(from: number, to: number): number[] {
  const widths: number[] = [];
  for (let width = 2 * from; width > to; width *= 0.6) widths.push(width);
  return widths;
}

function follow(problem: ArcProblem, curve: Curve, width: number, line: Int32Array): Curve {
  return matchLines(problem, curve, width, line) < 3 ? curve : fitCurve(problem, curve, width, line);
}

/** Each peak's nearest line within `width` px, and each line's nearest peak; returns how many. */
function matchLines(problem: ArcProblem, curve: Curve, width: number, line: Int32Array): number {
  const { t, u } = problem;
  const limit = width * problem.pixel * Math.abs(curve.stretch);
  const taken = problem.owner.fill(-1);
  let nMatch = 0;
  for (let i = 0; i < t.length; i++) {
    line[i] = -1;
    const here = readingAt(curve, t[i]);
    const above = lowerBound(u, here);
    const j = above === u.length || (above > 0 && here - u[above - 1] < u[above] - here) ? above - 1 : above;
    if (j < 0) continue;
    const off = Math.abs(u[j] - here);
    if (!(off <= limit)) continue;
    const rival = taken[j];
    if (rival >= 0) {
      if (Math.abs(u[j] - readingAt(curve, t[rival])) <= off) continue;
      line[rival] = -1;
      nMatch--;
    }
    line[i] = j;
    taken[j] = i;
    nMatch++;
  }
  return nMatch;
}

/** Least squares for (a₀, a₁, a₁q, a₁c), the last two held near 0 by what gratings do; linear, 4 × 4. */
function fitCurve(problem: ArcProblem, curve: Curve, width: number, line: Int32Array): Curve {
  const { t, u, error, pixel } = problem;
  const band = new Float64Array(16);
  const rhs = new Float64Array(4);
  const terms = [1, 0, 0, 0];
  for (let i = 0; i < t.length; i++) {
    if (line[i] < 0) continue;
    terms[1] = t[i];
    terms[2] = 1.5 * t[i] * t[i] - 0.5;
    terms[3] = (2.5 * t[i] * t[i] - 1.5) * t[i];
    const size = (width / 3) * (width / 3) + error[i] * error[i];
    const weight = 1 / (size * pixel * pixel * curve.stretch * curve.stretch);
    for (let a = 0; a < 4; a++) {
      rhs[a] += weight * terms[a] * u[line[i]];
      for (let b = 0; b <= a; b++) band[a * 4 + a - b] += weight * terms[a] * terms[b];
    }
  }
  band[8] += 1 / (LIMITS.curve * curve.stretch * LIMITS.curve * curve.stretch);
  band[12] += 1 / (LIMITS.cubic * curve.stretch * LIMITS.cubic * curve.stretch);
  factorBand(band, 4, 3);
  solveBand(band, 4, 3, rhs);
  const stretch = rhs[1];
  const within = (value: number, limit: number) => Math.min(limit, Math.max(-limit, value));
  if (!(stretch * curve.stretch > 0)) return curve;
  return {
    shift: rhs[0],
    stretch,
    curve: within(rhs[2] / stretch, LIMITS.curve),
    cubic: within(rhs[3] / stretch, LIMITS.cubic),
  };
}

function scoreOf(problem: ArcProblem, curve: Curve, width: number, line: Int32Array, nMatch: number): number {
  const { peakRank, lineRank, weight, nx } = problem;
  const n = line.length;
  const size = Math.abs(curve.stretch);
  if (
    Math.abs(curve.shift) > LIMITS.shift + BEYOND ||
    size < LIMITS.shortest - BEYOND ||
    size > LIMITS.longest + BEYOND
  ) {
    return Number.NEGATIVE_INFINITY;
  }
  const listed = Math.min(nMatch, n - 1) / n;
  const inFrame = weightWithin(problem, readingAt(curve, -1), readingAt(curve, 1));
  const perMatch = (listed * nx) / (2 * width * Math.max(1, inFrame));
  let sum = (n - nMatch) * log(1 - listed);
  for (let i = 0; i < n; i++) {
    if (line[i] < 0) continue;
    const ratio = weight[line[i]] * brightnessRatio(peakRank[i], lineRank[line[i]]);
    sum += log(1 - listed + perMatch * ratio);
  }
  return sum - log(nReadings(width * problem.pixel));
}

function weightWithin({ u, weightBelow }: ArcProblem, a: number, b: number): number {
  return weightBelow[lowerBound(u, Math.max(a, b))] - weightBelow[lowerBound(u, Math.min(a, b))];
}

/** V: readings within the limits that lie apart by 2τ at their ends, τ in t. */
function nReadings(tau: number): number {
  const apart = (range: number) => Math.max(1, range / (2 * tau));
  const stretches = 2 * (LIMITS.longest - LIMITS.shortest);
  return apart(2 * LIMITS.shift) * apart(stretches) * apart(2 * LIMITS.curve) * apart(2 * LIMITS.cubic);
}

/** Peaks in a row, by place, that a reading leaves without lines although it explains most others: so many that chance, which scatters its
 * false peaks, makes such a row once in a thousand arcs. Then the reading holds for a part of the arc only. */
export function unexplainedRow(problem: ArcProblem, { line, nMatch }: Reading): { from: number; to: number } | null {
  const order = Array.from(line.keys()).sort((a, b) => problem.t[a] - problem.t[b]);
  const n = order.length;
  const perPeak = log((n - nMatch + 1) / (n + 1));
  let begin = 0;
  for (let i = 0; i <= n; i++) {
    if (i < n && line[order[i]] < 0) continue;
    if (i > begin && (i - begin) * perPeak + log(n) < RARE) return { from: order[begin], to: order[i - 1] };
    begin = i + 1;
  }
  return null;
}

/** Peaks at the ends whose lines only they themselves speak for: without the outermost ones on a side the rest of the reading puts them
 * elsewhere, by more than `apart` (in u), and gives up no more than `margin` nats for it. A cubic bends to reach a false peak. */
export function unsupportedEnds(problem: ArcProblem, reading: Reading, apart: number, margin: number): number[] {
  const inOrder = Array.from(reading.line.keys())
    .filter((i) => reading.line[i] >= 0)
    .sort((a, b) => problem.t[a] - problem.t[b]);
  const doubtful = new Set<number>();
  for (const side of [inOrder, [...inOrder].reverse()]) {
    const line = reading.line.slice();
    for (let n = 0; n < MOST_AT_END && inOrder.length - n > LEFT_AT_LEAST; n++) {
      line[side[n]] = -1;
      const rest = fitCurve(problem, reading, reading.tolerance, line);
      const score = scoreOf(problem, reading, reading.tolerance, line, inOrder.length - n - 1);
      if (reading.score - score >= margin) break;
      for (const i of side.slice(0, n + 1)) {
        if (Math.abs(readingAt(rest, problem.t[i]) - problem.u[reading.line[i]]) > apart) doubtful.add(i);
      }
    }
  }
  return [...doubtful];
}

/** Readings that start a little off, in every combination of stretch and bend: what a reading could turn into nearby. */
export function nearbySeeds({ shift, stretch, curve, cubic }: Curve, step: number): Curve[] {
  const seeds: Curve[] = [];
  for (const a of [-1, 0, 1]) {
    for (const b of [-1, 0, 1]) {
      for (const c of [-1, 0, 1]) {
        if (a === 0 && b === 0 && c === 0) continue;
        seeds.push({
          shift,
          stretch: stretch * (1 + a * step),
          curve: curve + b * step,
          cubic: cubic + c * 0.5 * step,
        });
      }
    }
  }
  return seeds;
}
