/** Arcs with known truth for the identification's tests: lines of the lists at a made-up dispersion, some lost, some blended, others that are
 * none, and an approximate range that is wrong. Invented data. */
import type { IdentifiablePeak } from "../../src/calibration/identify.js";
import { lampLines } from "../../src/calibration/lamps.js";
import { openStream, type Stream } from "../../src/random/streams.js";

export interface ArcRecipe {
  seed: number;
  nx: number;
  /** True Å at the ends, before the bends. */
  range: [number, number];
  /** Lamps that are on. */
  lamps: string[];
  /** P₂, P₃ and P₄ in units of the half range. */
  bends: [number, number, number];
  /** px rms of centring, beside photons' share. */
  jitter: number;
  /** Brightest over faintest peak that is found. */
  depth: number;
  /** Share of the lines lost, false peaks for each true one. */
  lost: number;
  falsePeaks: number;
  fwhm: number;
  /** Decades by which lines' and lamps' brightness differ from the list's. */
  scatter: number;
}

export interface Arc {
  peaks: IdentifiablePeak[];
  /** Å at a column. */
  truth: (x: number) => number;
  nTrue: number;
}

export function makeArc(recipe: ArcRecipe): Arc {
  const dice = openStream(recipe.seed, "arc");
  const { nx, range, bends } = recipe;
  const truth = (x: number) => {
    const t = (2 * x) / (nx - 1) - 1;
    const p4 = (35 * t ** 4 - 30 * t * t + 3) / 8;
    const bent = t + (bends[0] * (3 * t * t - 1)) / 2 + (bends[1] * (5 * t * t - 3) * t) / 2 + bends[2] * p4;
    return (range[0] + range[1]) / 2 + ((range[1] - range[0]) / 2) * bent;
  };
  const peaks = found(merged(lightOf(recipe, truth, dice), recipe.fwhm), recipe, dice);
  const nTrue = peaks.length;
  const brightest = Math.max(...peaks.map((peak) => peak.electrons));
  const nFalse = Math.round(recipe.falsePeaks * nTrue);
  for (let i = 0; i < nFalse; i++) {
    const electrons = brightest * recipe.depth ** -dice.uniform();
    peaks.push({ x: dice.uniform() * (nx - 1), error: 0.05, electrons, fwhm: recipe.fwhm * (0.5 + dice.uniform()) });
  }
  return { peaks: peaks.sort((a, b) => a.x - b.x), truth, nTrue };
}

interface Light {
  x: number;
  electrons: number;
}

function lightOf({ lamps, nx, scatter }: ArcRecipe, truth: (x: number) => number, dice: Stream): Light[] {
  return lamps.flatMap((name) => {
    const lamp = 10 ** (scatter * dice.normal());
    const list = lampLines([name]);
    return Array.from(list.wavelength, (wavelength, i) => {
      const electrons = list.strength[i] * lamp * 10 ** (scatter * dice.normal());
      return { x: columnOf(truth, wavelength, nx), electrons };
    }).filter(({ x }) => x > 1 && x < nx - 2);
  });
}

/** By bisection; NaN off the frame. */
export function columnOf(truth: (x: number) => number, wavelength: number, nx: number): number {
  let [low, high] = [0, nx - 1];
  const sign = truth(high) > truth(low) ? 1 : -1;
  if (sign * (truth(low) - wavelength) > 0 || sign * (truth(high) - wavelength) < 0) return Number.NaN;
  for (let i = 0; i < 60; i++) {
    const middle = (low + high) / 2;
    if (sign * (truth(middle) - wavelength) > 0) high = middle;
    else low = middle;
  }
  return (low + high) / 2;
}

/** Lines nearer than 1.2 widths become one peak at their common middle. */
function merged(light: Light[], fwhm: number): Light[] {
  const out: Light[] = [];
  for (const one of [...light].sort((a, b) => a.x - b.x)) {
    const last = out[out.length - 1];
    if (last === undefined || one.x - last.x > 1.2 * fwhm) out.push({ ...one });
    else {
      const electrons = last.electrons + one.electrons;
      last.x = (last.x * last.electrons + one.x * one.electrons) / electrons;
      last.electrons = electrons;
    }
  }
  return out;
}

function found(light: Light[], { depth, lost, jitter, fwhm }: ArcRecipe, dice: Stream): IdentifiablePeak[] {
  const brightest = Math.max(...light.map(({ electrons }) => electrons));
  return light
    .filter(({ electrons }) => electrons > brightest / depth && dice.uniform() >= lost)
    .map(({ x, electrons }) => {
      const error = Math.hypot(jitter, 0.005 * Math.sqrt(brightest / electrons));
      return { x: x + error * dice.normal(), error, electrons, fwhm };
    });
}

export const SETUPS: { lamps: string[]; range: [number, number] }[] = [
  { lamps: ["Ne", "Ar"], range: [5800, 7430] },
  { lamps: ["Ne", "Ar", "Hg", "Cu"], range: [7390, 5600] },
  { lamps: ["Ne"], range: [5700, 7500] },
  { lamps: ["Ar"], range: [6900, 9000] },
  { lamps: ["Ar", "Hg"], range: [3900, 7200] },
  { lamps: ["Ne", "Ar"], range: [8900, 6900] },
  { lamps: ["Kr", "Xe"], range: [7500, 9900] },
  { lamps: ["Ne", "Ar", "Kr", "Xe"], range: [4300, 9700] },
  { lamps: ["Hg", "Cu", "Ar"], range: [4000, 6000] },
  { lamps: ["Ne"], range: [6100, 6700] },
  { lamps: ["Ar", "Kr"], range: [8600, 7400] },
  { lamps: ["He", "Ne", "Ar"], range: [4600, 7300] },
];

/** An approximate range off by up to `off` of its length in place and size, and turned round where `turned`. */
export function roughRange(
  [first, last]: [number, number],
  off: number,
  dice: Stream,
  turned: boolean,
): [number, number] {
  const length = last - first;
  const middle = (first + last) / 2 + off * (2 * dice.uniform() - 1) * length;
  const half = (length / 2) * (1 + off * (2 * dice.uniform() - 1)) * (turned ? -1 : 1);
  return [middle - half, middle + half];
}
