/** Do the methods agree within what their noise allows? They see the same pixels, so their difference has far less noise than
 * either: Δ = (f − f of joint) / σ of that very difference, from the model's variances. */
import { median } from "../reference/median.js";
import { cases, type ExpectedColumn, JOINT } from "./gain.js";
import { spread } from "./scatter.js";
import type { Method, Spectra } from "./spectra.js";

const leastPoints = 30;
/** A difference whose variance is below this share of joint's is rounding: the two are the same estimate there. */
const sameEstimate = 0.003;

export interface Agreement {
  method: Method;
  crosstalkCorrected: boolean;
  /** By joint's flux, e⁻ per column; levels of fewer than 30 points are left out. */
  levels: {
    from: number;
    to: number;
    nPoint: number;
    /** Of Δ. */
    median: number;
    /** Robust standard deviation of Δ; 1 when the methods differ by noise alone. */
    spread: number;
    /** Median of (f − f of joint) in units of joint's own error bar: what it matters. */
    medianInErrorBars: number;
  }[];
}

export function measureAgreement(
  runs: Spectra[],
  columns: ExpectedColumn[],
  active: readonly number[],
  edges: readonly number[] = [Number.NEGATIVE_INFINITY, 100, 1000, 1e4, 1e5, Number.POSITIVE_INFINITY],
): Agreement[] {
  const joint = runs[JOINT];
  return runs.flatMap((run, i) => {
    if (i === JOINT) return [];
    const levels = edges
      .slice(1)
      .map((to, e) => ({ from: edges[e], to, deltas: [] as number[], bars: [] as number[] }));
    for (const column of columns) {
      active.forEach((row, k) => {
        const at = row * joint.nx + column.x;
        const variance = column.differenceVariance[i][k];
        if ((run.flags[at] | joint.flags[at]) !== 0 || !(variance > sameEstimate * joint.variance[at])) return;
        const level = levels.find(({ from, to }) => joint.flux[at] >= from && joint.flux[at] < to);
        level?.deltas.push((run.flux[at] - joint.flux[at]) / Math.sqrt(variance));
        level?.bars.push((run.flux[at] - joint.flux[at]) / Math.sqrt(joint.variance[at]));
      });
    }
    const [method, crosstalkCorrected] = cases[i];
    const told = levels.filter(({ deltas }) => deltas.length >= leastPoints);
    const summed = told.map(({ from, to, deltas, bars }) => ({
      ...{ from, to, nPoint: deltas.length },
      ...{ median: median(deltas), spread: spread(deltas), medianInErrorBars: median(bars) },
    }));
    return [{ method, crosstalkCorrected, levels: summed }];
  });
}
