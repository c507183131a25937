/** Light that leaves the brightest fibres for their neighbours, as each method sees it: its flux at the neighbour less joint's,
 * over the bright fibre's flux, summed along the spectrum; beside it what the profile model expects. */
import { median } from "../reference/median.js";
import { cases, type ExpectedColumn, JOINT } from "./gain.js";
import { type Method, type Spectra, UNUSABLE } from "./spectra.js";

const nBrightest = 8;
const leastColumns = 20;

export interface NeighbourLeak {
  /** Slit positions, from 1. */
  bright: number;
  fibre: number;
  method: Method;
  crosstalkCorrected: boolean;
  /** Σ (flux − joint) at the fibre over Σ joint at the bright one, with its standard error from the scatter of the columns. */
  share: number;
  error: number;
  /** C: the bright fibre's part in it, from the profile model; 0 for corrected methods. */
  model: number;
  /** The same with the light of all other neighbours, which `share` holds too. */
  modelOfAll: number;
}

/** `runs`: by `cases`; `active`: rows of the columns' fibres; `fibre`: slit positions, from 1, of all rows. */
export function measureLeaks(
  runs: Spectra[],
  columns: ExpectedColumn[],
  active: readonly number[],
  fibre: ArrayLike<number>,
): NeighbourLeak[] {
  const joint = runs[JOINT];
  const bright = active
    .map((row, k) => ({ k, row, flux: typicalFlux(joint, row) }))
    .filter(({ flux }) => flux > 0)
    .sort((a, b) => b.flux - a.flux)
    .slice(0, nBrightest);
  return bright.flatMap(({ k, row }) =>
    [k - 1, k + 1].flatMap((m) => {
      if (m < 0 || m >= active.length || Math.abs(active[m] - row) !== 1) return [];
      return runs.flatMap((run, i) => {
        const leak = i === JOINT ? null : leakAt(run, joint, columns, active, i, m, k);
        if (leak === null) return [];
        const [method, crosstalkCorrected] = cases[i];
        return [{ bright: fibre[row], fibre: fibre[active[m]], method, crosstalkCorrected, ...leak }];
      });
    }),
  );
}

export function typicalFlux({ flux, flags, nx }: Spectra, row: number): number {
  const good: number[] = [];
  for (let at = row * nx; at < (row + 1) * nx; at++) if ((flags[at] & UNUSABLE) === 0) good.push(flux[at]);
  return median(good);
}

/** Sums over the columns for the estimate `i` of fibre m beside the bright fibre k. */
function leakAt(
  run: Spectra,
  joint: Spectra,
  columns: ExpectedColumn[],
  active: readonly number[],
  i: number,
  m: number,
  k: number,
) {
  const { nx } = joint;
  const [excess, light]: number[][] = [[], []];
  let [fromBright, fromAll, all] = [0, 0, 0];
  for (let x = 0; x < nx; x++) {
    const [here, there] = [active[m] * nx + x, active[k] * nx + x];
    if ((run.flags[here] | joint.flags[here]) !== 0 || (joint.flags[there] & UNUSABLE) !== 0) continue;
    excess.push(run.flux[here] - joint.flux[here]);
    light.push(joint.flux[there]);
    all += joint.flux[there];
    const column = columns[Math.min(columns.length - 1, Math.floor((x * columns.length) / nx))];
    const shared = column.crosstalk[i];
    if (shared === null) continue;
    const b = column.bandwidth;
    for (let j = Math.max(0, m - b); j <= Math.min(active.length - 1, m + b); j++) {
      const flux = joint.flux[active[j] * nx + x];
      const taken = shared[m * (2 * b + 1) + j - m + b] * flux;
      if (j === k) fromBright += taken;
      if (j !== m && !Number.isNaN(flux)) fromAll += taken;
    }
  }
  if (excess.length < leastColumns || !(all > 0)) return null;
  const share = excess.reduce((sum, value) => sum + value, 0) / all;
  const squares = excess.reduce((sum, value, x) => sum + (value - share * light[x]) ** 2, 0);
  const error = Math.sqrt((squares * excess.length) / (excess.length - 1)) / all;
  return { share, error, model: fromBright / all, modelOfAll: fromAll / all };
}
