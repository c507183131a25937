/** What came of a tracing or an extraction, in a few numbers. */
import { medianSignalToNoise } from "../extraction/snr.js";
import { Flag, type Spectra, UNUSABLE } from "../extraction/spectra.js";
import { legendreArgument, legendreValue } from "../reference/legendre.js";
import { median } from "../reference/median.js";
import type { Tramlines } from "../tramlines/tramlines.js";

export interface FibreCounts {
  positions: number;
  blocks: number;
  lit: number;
  dim: number;
  dead: number;
  /** From 1. */
  dimPositions: number[];
  deadPositions: number[];
}

export function countFibres({ nFibre, state, block, fibre }: Tramlines): FibreCounts {
  const having = (wanted: string) => Array.from(fibre).filter((_, k) => state[k] === wanted);
  const dimPositions = having("dim");
  const deadPositions = having("dead");
  return {
    positions: nFibre,
    blocks: new Set(block).size,
    lit: nFibre - dimPositions.length - deadPositions.length,
    dim: dimPositions.length,
    dead: deadPositions.length,
    dimPositions,
    deadPositions,
  };
}

/** FWHM of a Gaussian: 2√(2 ln 2) σ. */
const FWHM_PER_SIGMA = 2.3548200450309493;

/** Full width at half maximum of a Gaussian as wide as the profile, pixels: median over lit fibres in the middle column. */
export function medianFwhm({ profile, state }: Tramlines): number {
  const nCoef = profile.widthDegree + 1;
  const widths = state.flatMap((one, k) => (one === "dead" ? [] : [legendreValue(profile.sigma, 0, k * nCoef, nCoef)]));
  return FWHM_PER_SIGMA * median(widths);
}

/** y(x) of every fibre in every column: [nFibre × nx], pixels. */
export function tramlineHeights({ legendre, degree, nFibre, nx }: Tramlines): Float64Array {
  const nCoef = degree + 1;
  return Float64Array.from({ length: nFibre * nx }, (_, i) =>
    legendreValue(legendre, legendreArgument(i % nx, nx), Math.floor(i / nx) * nCoef, nCoef),
  );
}

export type FlagCounts = Record<keyof typeof Flag, number>;

const FLAGS = Object.entries(Flag).filter(([, bit]) => typeof bit === "number") as [keyof typeof Flag, Flag][];

export interface SpectraSummary {
  /** Spectrum points of fibres that are not dead. */
  nPoint: number;
  /** Of those, points that can be trusted. */
  nUsable: number;
  /** Of those, points with each flag. */
  flags: FlagCounts;
  /** Per dispersion pixel, over the fibres' own medians. */
  signalToNoise: { faintest: number; median: number; brightest: number };
  /** nFibre: of each fibre; NaN where it has no usable point. */
  fibreSignalToNoise: Float64Array;
  /** nFibre: share of each fibre's points that can be trusted. */
  fibreUsableShare: Float64Array;
}

/** Usable points among those from `from` on and before `end`; their flags are added to `counts`. Most have none. */
function countRow(flags: Int32Array, from: number, end: number, counts: FlagCounts | null): number {
  let nUsable = 0;
  for (let i = from; i < end; i++) {
    const bits = flags[i];
    if ((bits & UNUSABLE) === 0) nUsable++;
    if (bits !== 0 && counts !== null) for (const [name, bit] of FLAGS) if (bits & bit) counts[name]++;
  }
  return nUsable;
}

/** `fibreSignalToNoise`: what `medianSignalToNoise` says of them, where that is known already. */
export function summariseSpectra(
  spectra: Spectra,
  { state }: Pick<Tramlines, "state">,
  fibreSignalToNoise = medianSignalToNoise(spectra),
): SpectraSummary {
  const { nFibre, nx, flags } = spectra;
  const counts = Object.fromEntries(FLAGS.map(([name]) => [name, 0])) as FlagCounts;
  const fibreUsableShare = new Float64Array(nFibre);
  let nPoint = 0;
  for (let k = 0; k < nFibre; k++) {
    const nUsable = countRow(flags, k * nx, (k + 1) * nx, state[k] === "dead" ? null : counts);
    fibreUsableShare[k] = nUsable / nx;
    if (state[k] !== "dead") nPoint += nx;
  }
  const known = Array.from(fibreSignalToNoise).filter(Number.isFinite);
  return {
    nPoint,
    nUsable: Math.round(fibreUsableShare.reduce((sum, share) => sum + share * nx, 0)),
    flags: counts,
    signalToNoise: {
      faintest: known.length > 0 ? Math.min(...known) : Number.NaN,
      median: median(known),
      brightest: known.length > 0 ? Math.max(...known) : Number.NaN,
    },
    fibreSignalToNoise,
    fibreUsableShare,
  };
}
