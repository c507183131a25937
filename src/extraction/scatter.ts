/** What the spectra themselves show of each method's noise: second differences along x,
 *
 *     D = f(x−1) − 2 f(x) + f(x+1),
 *
 * hold next to nothing of a smooth spectrum, and their scatter rests on no error bar. Only fibres count in which noise rules:
 * where D of joint scatters by little more than its error bars say. */
import { median } from "../reference/median.js";
import { BOXCAR, JOINT } from "./gain.js";
import type { Spectra } from "./spectra.js";

/** Robust scatter of D over its expectation up to which noise rules. */
const noiseRules = 1.3;
const leastPoints = 30;

/** Variance of the corrected boxcar's D over a method's: medians over the fibres in which noise rules, NaN without any. */
export interface ScatterGain {
  /** Of robust variances. */
  seen: number;
  /** By the methods' own error bars. */
  promised: number;
}

/** `runs`: by `cases`; `active`: rows that hold light. */
export function scatterGains(runs: Spectra[], active: readonly number[]): ScatterGain[] {
  const gains = runs.map(() => ({ seen: [] as number[], promised: [] as number[] }));
  for (const row of active) {
    const places = cleanPlaces(runs, row);
    const inJoint = places.map((at) => secondDifference(runs[JOINT].flux, at) / Math.sqrt(noiseAt(runs[JOINT], at)));
    if (places.length < leastPoints || spread(inJoint) > noiseRules) continue;
    // In units of joint's error bars, so that bright and faint places count alike.
    const seen = runs.map(({ flux }) =>
      spread(places.map((at) => secondDifference(flux, at) / Math.sqrt(noiseAt(runs[JOINT], at)))),
    );
    const promised = runs.map((run) => median(places.map((at) => noiseAt(runs[BOXCAR], at) / noiseAt(run, at))));
    gains.forEach((gain, i) => {
      gain.seen.push((seen[BOXCAR] / seen[i]) ** 2);
      gain.promised.push(promised[i]);
    });
  }
  return gains.map(({ seen, promised }) => ({ seen: median(seen), promised: median(promised) }));
}

function cleanPlaces(runs: Spectra[], row: number): number[] {
  const { nx } = runs[JOINT];
  const inner = Array.from({ length: Math.max(0, nx - 2) }, (_, i) => row * nx + 1 + i);
  return inner.filter(
    (at) =>
      noiseAt(runs[JOINT], at) > 0 && runs.every(({ flags }) => (flags[at - 1] | flags[at] | flags[at + 1]) === 0),
  );
}

function secondDifference(flux: Spectra["flux"], at: number): number {
  return flux[at - 1] - 2 * flux[at] + flux[at + 1];
}

function noiseAt({ variance }: Spectra, at: number): number {
  return variance[at - 1] + 4 * variance[at] + variance[at + 1];
}

/** Robust standard deviation: 1.4826 × median distance from the median. */
export function spread(values: number[]): number {
  const middle = median(values);
  return 1.4826 * median(values.map((value) => Math.abs(value - middle)));
}
