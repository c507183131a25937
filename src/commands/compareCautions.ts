/** Where a wrong reading of a comparison, or a wrong choice after it, would cost someone. */
import type { Agreement } from "../extraction/agreement.js";
import type { Comparison } from "../extraction/compare.js";
import type { NeighbourLeak } from "../extraction/leakage.js";
import type { FibreAdvice } from "../extraction/recommend.js";
import { counted, fixed, percentage, ranges } from "./textTable.js";

/** Of methods that should agree: median and scatter of the difference in its own σ, from which on they do not. */
const disagreeMedian = 0.5;
const disagreeSpread = 1.5;
/** A leak disagrees with the profile model by this many σ, and this share of the bright fibre's light. */
const leakSigma = 5;
const leakShare = 0.001;
const costlyGain = 1.3;

export function methodName({
  method,
  crosstalkCorrected,
}: Pick<NeighbourLeak, "method" | "crosstalkCorrected">): string {
  if (method === "joint") return "joint";
  return `${method}, ${crosstalkCorrected ? "cross-talk corrected" : "uncorrected"}`;
}

export function cautions(comparison: Comparison): string[] {
  const { nWitness, leaks, agreement, fibres } = comparison;
  return [
    "S/N and worth in exposure rest on each method's own error bars, which are right only as far as the profile is; 'hatchel recover' tests them on this frame.",
    nWitness === 0
      ? "no fibre stands beside one 30 times brighter, so the table's leak says nothing on this frame."
      : "leak is measured against joint, so light that joint itself misplaces does not show.",
    ...ofMethods(comparison),
    ...ofFibres(fibres),
    ...ofLeaks(leaks),
    ...ofAgreement(agreement),
  ];
}

function ofMethods({ methods }: Comparison): string[] {
  const said: string[] = [];
  const joint = methods.find(({ method }) => method === "joint");
  for (const one of methods) {
    const name = methodName(one);
    if (!one.crosstalkCorrected && joint && one.medianSignalToNoise > joint.medianSignalToNoise) {
      said.push(`${name} takes neighbours' light for signal, so its higher S/N is no gain.`);
    }
    if (!one.crosstalkCorrected && Math.abs(one.leakedShare) > 0.01) {
      said.push(
        `${name} counts ${percentage(one.leakedShare)} of a bright neighbour's light as the faint fibre's own: its S/N beside bright fibres is not that of the target.`,
      );
    }
    if (Math.abs(one.fluxRatio - 1) > 0.02) {
      said.push(`${name} finds ${percentage(one.fluxRatio)} of joint's flux: do not mix fluxes of the two methods.`);
    }
    if (one.crosstalkCorrected && one.seenExposure < 0.85 * one.promisedExposure) {
      said.push(
        `${name} promises ${fixed(one.promisedExposure, 2)} × exposure where noise rules, but the spectra's scatter shows ${fixed(one.seenExposure, 2)} ×: its error bars are too small there.`,
      );
    }
  }
  return said;
}

function ofFibres(fibres: FibreAdvice[]): string[] {
  const said: string[] = [];
  const lit = fibres.filter(({ method }) => method !== null);
  const spoilt = lit.filter(({ method }) => method === "joint");
  if (spoilt.length > 0) {
    const worst = spoilt.reduce((a, b) => (Math.abs(b.takenShare) > Math.abs(a.takenShare) ? b : a));
    said.push(
      `without cross-talk correction neighbours' light counts in ${spoilt.length} of ${counted(lit.length, "fibre")}; worst is fibre ${worst.fibre}: ${worst.reason}.`,
    );
  }
  const costly = lit.filter(({ gain }) => gain > costlyGain);
  if (costly.length > 0) {
    const most = costly.reduce((a, b) => (b.gain > a.gain ? b : a));
    said.push(
      `a cross-talk corrected boxcar costs over ${costlyGain} × exposure in ${counted(costly.length, "fibre")}, ${fixed(most.gain, 2)} × in fibre ${most.fibre}.`,
    );
  }
  const misfit = lit.filter(({ chi2 }) => chi2 > 3);
  if (misfit.length > 0) {
    said.push(
      `the profile misfits ${misfit.length === 1 ? "fibre" : "fibres"} ${ranges(misfit.map(({ fibre }) => fibre))} (chi2 over 3): weighted and joint fluxes are off there by more than noise, and so may be those of their neighbours.`,
    );
  }
  return said;
}

function ofLeaks(leaks: NeighbourLeak[]): string[] {
  const off = leaks.filter(
    ({ share, error, modelOfAll }) => Math.abs(share - modelOfAll) > Math.max(leakSigma * error, leakShare),
  );
  if (off.length === 0) return [];
  const worst = off.reduce((a, b) => (Math.abs(b.share - b.modelOfAll) > Math.abs(a.share - a.modelOfAll) ? b : a));
  return [
    `light beside the brightest fibres is not what the profile says, as in fibre ${worst.fibre} beside ${worst.bright} (${methodName(worst)} ${percentage(worst.share, 3)} ± ${percentage(worst.error, 3)}, model ${percentage(worst.modelOfAll, 3)}): its wings are wrong, in joint and in every correction.`,
  ];
}

function ofAgreement(agreement: Agreement[]): string[] {
  return agreement.flatMap((one) => {
    const off = one.crosstalkCorrected
      ? one.levels.filter(({ median, spread }) => Math.abs(median) > disagreeMedian || spread > disagreeSpread)
      : [];
    if (off.length === 0) return [];
    const worst = off.reduce((a, b) => (b.spread > a.spread ? b : a));
    return [
      `${methodName(one)} and joint differ by more than noise (median ${fixed(worst.median, 1)}, scatter ${fixed(worst.spread, 1)} sigma of the difference): the profile is not right.`,
    ];
  });
}
