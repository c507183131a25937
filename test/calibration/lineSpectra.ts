/** Spectra of lines with known centres. Invented data; the light of a pixel comes from the simulator's own Φ, not from the fit's. */

import type { Spectra } from "../../src/extraction/spectra.js";
import { Flag } from "../../src/extraction/spectra.js";
import { openStream } from "../../src/random/streams.js";
import { normalCumulative } from "../../src/simulate/gaussian.js";

export interface MadeLine {
  x: number;
  electrons: number;
}

export const readNoise = 6;

/** One row a list of lines, with Poisson-like noise (normal, from the model) unless `noise` is 0. */
export function makeSpectra(
  rows: MadeLine[][],
  { nx = 200, sigma = 0.93, continuum = 30, noise = 1, seed = 5 } = {},
): Spectra {
  const nFibre = rows.length;
  const dice = openStream(seed, "line spectra");
  const flux = new Float64Array(nFibre * nx);
  const variance = new Float64Array(nFibre * nx);
  rows.forEach((lines, k) => {
    for (let x = 0; x < nx; x++) {
      let light = continuum + 0.05 * x;
      for (const { x: middle, electrons } of lines) {
        light +=
          electrons * (normalCumulative((x + 0.5 - middle) / sigma) - normalCumulative((x - 0.5 - middle) / sigma));
      }
      const at = k * nx + x;
      variance[at] = light + readNoise ** 2;
      flux[at] = light + noise * Math.sqrt(variance[at]) * dice.normal();
    }
  });
  const none = () => new Float64Array(nFibre * nx);
  return {
    ...{ nFibre, nx, method: "joint", crosstalkCorrected: true, flux, variance, flags: new Int32Array(nFibre * nx) },
    ...{ neighbourCovariance: none(), chi2: none(), background: none() },
  };
}

/** Cuts off what is above a level, as a full detector does. */
export function saturate({ flux, flags }: Spectra, level: number, flagged: boolean): void {
  flux.forEach((value, i) => {
    if (value < level) return;
    flux[i] = flagged ? Number.NaN : level;
    if (flagged) flags[i] = Flag.saturated;
  });
}
