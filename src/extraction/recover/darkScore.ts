/** Light that dark positions are given, against what their lit neighbours hold. */
import { median } from "../../reference/median.js";
import { Flag, type Spectra, UNUSABLE } from "../spectra.js";
import type { WidenedTramlines } from "./dark.js";

export interface DarkScore {
  /** Of the injected light, or the frame's own. */
  light: "injected" | "own";
  /** 1: beside a lit fibre; 2: next but one. */
  distance: number;
  nPosition: number;
  /** Mean over the positions of Σ found ÷ Σ light of the brighter of the nearest lit fibres, column by column. */
  meanShare: number;
  /** The standard error that the error bars give it. */
  meanError: number;
  /** The share farthest from 0, its error, and where. */
  worstShare: number;
  worstError: number;
  worstPosition: string;
  /** Robust standard deviation of found / σ about 0: 1 when there is nothing but the noise that the error bars know. */
  pull: number;
}

const spoilt = UNUSABLE | Flag.cosmicRay | Flag.badPixel | Flag.neighbourSaturated;
const fewestColumns = 20;
const sigmaPerMad = 1.482602218505602;

/** One light's spectra, dark positions among them: flux and variance of every row and column. */
export interface DarkSpectra {
  flux: (at: number) => number;
  variance: (at: number) => number;
  usable: (at: number) => boolean;
  /** e⁻ of the active fibre k in column x. */
  lit: (k: number, x: number) => number;
}

/** The frame's own spectra. */
export function ownLight(spectra: Spectra, rows: number[]): DarkSpectra {
  const { flux, variance, flags, nx } = spectra;
  return {
    flux: (at) => flux[at],
    variance: (at) => variance[at],
    usable: (at) => (flags[at] & spoilt) === 0,
    lit: (k, x) => flux[rows[k] * nx + x],
  };
}

/** What was injected: `added` less `without`. `light`: e⁻ of the active fibre k in column x. */
export function injectedLight(without: Spectra, added: Spectra, light: (k: number, x: number) => number): DarkSpectra {
  return {
    flux: (at) => added.flux[at] - without.flux[at],
    variance: (at) => added.variance[at] - without.variance[at],
    usable: (at) => ((added.flags[at] & UNUSABLE) | (without.flags[at] & spoilt)) === 0,
    lit: light,
  };
}

/** By distance; distances without a position are left out. */
export function scoreDark(name: DarkScore["light"], spectra: DarkSpectra, widened: WidenedTramlines): DarkScore[] {
  const { nx } = widened.tramlines;
  return [1, 2].flatMap((distance) => {
    const shares: { share: number; error: number; name: string }[] = [];
    const pulls: number[] = [];
    for (const position of widened.dark) {
      if (position.distance !== distance) continue;
      let [found, variance, light, n] = [0, 0, 0, 0];
      for (let x = 0; x < nx; x++) {
        const at = position.row * nx + x;
        const [below, above] = [position.below, position.above].map((k) => (k < 0 ? 0 : spectra.lit(k, x)));
        const bright = Math.max(below || 0, above || 0);
        const own = spectra.variance(at);
        if (!spectra.usable(at) || !(own > 0) || !(bright > 0)) continue;
        found += spectra.flux(at);
        variance += own;
        light += bright;
        n++;
        pulls.push(spectra.flux(at) / Math.sqrt(own));
      }
      if (n < fewestColumns) continue;
      shares.push({ share: found / light, error: Math.sqrt(variance) / light, name: position.name });
    }
    if (shares.length === 0) return [];
    const worst = shares.reduce((a, b) => (Math.abs(b.share) > Math.abs(a.share) ? b : a));
    const sum = (of: (one: { share: number; error: number }) => number) =>
      shares.reduce((total, one) => total + of(one), 0);
    return [
      {
        light: name,
        distance,
        nPosition: shares.length,
        meanShare: sum(({ share }) => share) / shares.length,
        meanError: Math.sqrt(sum(({ error }) => error * error)) / shares.length,
        ...{ worstShare: worst.share, worstError: worst.error, worstPosition: worst.name },
        pull: sigmaPerMad * median(pulls.map(Math.abs)),
      },
    ];
  });
}
