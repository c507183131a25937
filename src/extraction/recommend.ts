/** Which method serves each fibre, and why: a plain sum, uncorrected, where nothing speaks against it, since it rests least on the
 * profile; optimal, uncorrected, where weighting gains; joint where neighbours' light would count. Joint is right in all of
 * them as far as the profile is. */
import { median } from "../reference/median.js";
import type { FibreState } from "../tramlines/tramlines.js";
import { BOXCAR, type ExpectedColumn, JOINT } from "./gain.js";
import { typicalFlux } from "./leakage.js";
import { type Method, type Spectra, UNUSABLE } from "./spectra.js";

/** Reduced χ² from which on the profile is not the fibre's. */
const misfitChi2 = 3;
/** Neighbours' light matters from this share of a fibre's own, or of ten times its error bar, on. */
const leakMatters = 0.01;
/** Exposure from which on weighting is worth its dependence on the profile. */
const gainMatters = 1.05;
const OPTIMAL_ALONE = 2;
const BOXCAR_ALONE = 4;

export interface FibreAdvice {
  fibre: number;
  /** Null for a fibre without usable light. */
  method: Method | null;
  reason: string;
  /** Exposure that the corrected plain sum needs over joint's; medians along the spectrum, as the rest. */
  gain: number;
  /** Light that an uncorrected plain sum would take from all neighbours, over the fibre's own. */
  takenShare: number;
  /** The neighbour that gives most, its share C that is taken. */
  from: number | null;
  fromShare: number;
  chi2: number;
}

/** Light of neighbours in an uncorrected estimate. */
interface Taken {
  /** e⁻ per column */
  total: number;
  /** Slit position, from 1, and C. */
  from: number;
  share: number;
}

/** One for each slit position. `runs`: by `cases`; `active`: rows of the columns' fibres. */
export function recommendMethods(
  runs: Spectra[],
  columns: ExpectedColumn[],
  active: readonly number[],
  { fibre, state }: { fibre: ArrayLike<number>; state: FibreState[] },
): FibreAdvice[] {
  const none = { gain: Number.NaN, takenShare: Number.NaN, from: null, fromShare: Number.NaN, chi2: Number.NaN };
  return state.map((_, row) => {
    const k = active.indexOf(row);
    const own = k < 0 ? Number.NaN : typicalFlux(runs[JOINT], row);
    if (k < 0) return { fibre: fibre[row], method: null, reason: "dead", ...none };
    if (Number.isNaN(own)) return { fibre: fibre[row], method: null, reason: "no usable point", ...none };
    const gain = median(columns.map(({ variance }) => variance[BOXCAR][k] / variance[JOINT][k]));
    const [boxcar, optimal] = [BOXCAR_ALONE, OPTIMAL_ALONE].map((i) => takenFrom(runs[JOINT], columns, active, i, k));
    const [sigma, chi2] = [typicalSigma(runs[JOINT], row), typicalChi2(runs[JOINT], row)];
    const about = (taken: Taken) => ({ ...taken, from: fibre[taken.from] ?? 0, own, sigma });
    return {
      fibre: fibre[row],
      ...choose(about(boxcar), about(optimal), gain, chi2),
      ...{ gain, takenShare: boxcar.total / own, from: fibre[boxcar.from] ?? null, fromShare: boxcar.share, chi2 },
    };
  });
}

/** One method for all fibres, since spectra of one frame should be of one kind: the least demanding one that serves each. */
export function recommendation(fibres: FibreAdvice[]): { method: Method | null; reason: string } {
  const count = (method: Method) => fibres.filter((one) => one.method === method).length;
  const all = fibres.filter((one) => one.method !== null).length;
  if (all === 0) return { method: null, reason: "no fibre holds usable light" };
  if (count("joint") > 0) {
    return { method: "joint", reason: `since neighbours' light would count in ${count("joint")} of ${all} fibres` };
  }
  if (count("optimal") > 0) {
    return { method: "optimal", reason: `since weighting is worth it in ${count("optimal")} of ${all} fibres` };
  }
  return {
    method: "boxcar",
    reason: "since weighting gains next to nothing or the profile misfits, and neighbours leak next to nothing",
  };
}

type Leak = Taken & { own: number; sigma: number };

function choose(boxcar: Leak, optimal: Leak, gain: number, chi2: number): { method: Method; reason: string } {
  const misfits = chi2 > misfitChi2;
  if (matters(boxcar)) {
    const doubt = misfits ? `; profile misfits: chi2 ${chi2.toFixed(1)}` : "";
    return { method: "joint", reason: `boxcar would take ${words(boxcar)}${doubt}` };
  }
  if (misfits) return { method: "boxcar", reason: `profile misfits: chi2 ${chi2.toFixed(1)}` };
  if (gain < gainMatters) return { method: "boxcar", reason: `weighted gains only ${gain.toFixed(2)} x exposure` };
  if (matters(optimal)) return { method: "joint", reason: `optimal would take ${words(optimal)}` };
  return { method: "optimal", reason: `weighted gains ${gain.toFixed(2)} x exposure` };
}

function matters({ total, own, sigma }: Leak): boolean {
  return Math.abs(total) > leakMatters * Math.max(own, 10 * sigma);
}

function words({ share, from, total, own, sigma }: Leak): string {
  return `${percent(share)} of its neighbour ${from} (all neighbours: ${amount(total, own, sigma)})`;
}

function amount(total: number, own: number, sigma: number): string {
  if (own < 3 * sigma) return `${(total / sigma).toPrecision(2)} sigma`;
  return total < own ? `${percent(total / own)} of its own light` : `${(total / own).toFixed(1)} x its own light`;
}

function percent(share: number): string {
  return `${(100 * share).toPrecision(2)} %`;
}

/** Neighbours' light in estimate i of fibre k. `from` is a row. */
function takenFrom(joint: Spectra, columns: ExpectedColumn[], active: readonly number[], i: number, k: number): Taken {
  const b = columns[0].bandwidth;
  const taken: Taken = { total: 0, from: -1, share: Number.NaN };
  let most = 0;
  for (let m = Math.max(0, k - b); m <= Math.min(active.length - 1, k + b); m++) {
    if (m === k) continue;
    const shares = columns.map(({ crosstalk }) => crosstalk[i]![k * (2 * b + 1) + m - k + b]);
    const light = columns.map(({ x }, c) => shares[c] * joint.flux[active[m] * joint.nx + x]);
    const typical = median(light.filter((value) => !Number.isNaN(value))) || 0;
    taken.total += typical;
    if (Math.abs(typical) > most) {
      most = Math.abs(typical);
      taken.from = active[m];
      taken.share = median(shares);
    }
  }
  return taken;
}

function typicalSigma({ variance, nx }: Spectra, row: number): number {
  return Math.sqrt(median(variance.subarray(row * nx, (row + 1) * nx).filter((value) => value > 0)));
}

function typicalChi2({ chi2, flags, nx }: Spectra, row: number): number {
  const good = Array.from({ length: nx }, (_, x) => row * nx + x).filter((at) => (flags[at] & UNUSABLE) === 0);
  return median(good.map((at) => chi2[at]).filter((value) => !Number.isNaN(value)));
}
