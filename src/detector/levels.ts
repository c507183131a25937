/** Levels of a picture in a few numbers: what a person looks at first, and what the sanity checks judge by. */
import type { Assembled } from "./assemble.js";
import { finite, quantileInPlace, thinned } from "./clip.js";

export interface Levels {
  /** e⁻ above the zero level: 1, 5, 50, 95 and 99 % of the pixels lie below. */
  p1: number;
  p5: number;
  median: number;
  p95: number;
  p99: number;
  /** Share of pixels that saturated, before growing along bleeds. */
  saturatedShare: number;
}

export function levelsOf(frame: Assembled): Levels {
  const values = finite(thinned(frame.electrons));
  const at = (q: number) => quantileInPlace(values, q);
  return {
    p1: at(0.01),
    p5: at(0.05),
    median: at(0.5),
    p95: at(0.95),
    p99: at(0.99),
    saturatedShare: saturatedShare(frame),
  };
}

/** Share of pixels without a value. */
export function missingShare({ electrons }: Assembled): number {
  let n = 0;
  for (let i = 0; i < electrons.length; i++) if (Number.isNaN(electrons[i])) n++;
  return n / electrons.length;
}

export function saturatedShare(frame: Assembled): number {
  return frame.nSaturated / frame.electrons.length;
}

/** The largest read noise among the amplifiers, e⁻: what "no light" is measured against. */
export function largestReadNoise(frame: Assembled): number {
  return Math.sqrt(Math.max(...frame.regions.map((region) => region.readVariance)));
}
