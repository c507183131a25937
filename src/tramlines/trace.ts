/** From fibre flats to tramlines: find the fibres in a cut, name them, walk outward, centre all of them jointly in
 * groups of columns, and put a Legendre series through each. */
import { medianOf } from "../detector/clip.js";
import type { Frame } from "../detector/frame.js";
import { loadKernels } from "../kernels/module.js";
import { cutThrough } from "./cut.js";
import { findPeaks } from "./find.js";
import { type Flat, flatOf } from "./flat.js";
import type { SlitLayout } from "./layout.js";
import { flatWarnings, requireFlat } from "./misuse.js";
import { fibres, type Naming, nameFibres, numberFibres } from "./name.js";
import { type Refined, type RefineOptions, refine } from "./refine.js";
import type { SeriesSet } from "./series.js";
import type { FibreState, Tramlines } from "./tramlines.js";
import { pathAt, walkOutward } from "./walk.js";

export type TraceOptions = RefineOptions;

export interface Tracing {
  tramlines: Tramlines;
  naming: { score: number; runnerUpScore: number; readings: string[] };
  /** px: root mean square over all fibres' points about their series. */
  rms: number;
  worstRms: number;
  /** From 1. */
  worstFibre: number;
  degree: number;
  assumptions: string[];
  warnings: string[];
}

/** A fibre with less than this share of the light around it is dim. */
const DIM_SHARE = 0.3;

/** Traces fibre flats of one readout window, combined already or not. `layout`: the slit; without it fibres are numbered as found.
 * @throws TraceError when the frame is no usable fibre flat, NamingError when fibres cannot be named with certainty. */
export async function traceFlat(
  flat: Frame | Frame[] | Flat,
  layout?: SlitLayout,
  options: TraceOptions = {},
): Promise<Tracing> {
  const kernels = await loadKernels();
  const combined = flatOf(flat);
  requireFlat(kernels, combined);
  const cut = cutThrough(kernels, combined);
  const peaks = findPeaks(kernels, cut, combined.name);
  const naming = layout === undefined ? numberFibres(peaks, combined.name) : nameFibres(peaks, layout, combined.name);
  const lit = Array.from(naming.peak.keys()).filter((k) => naming.peak[k] >= 0);
  const pitch = typicalPitch(lit.map((k) => naming.centre[k]));
  const path = walkOutward(kernels, combined, naming.centre, lit, cut.x, cut.slope, pitch);
  const warnings = [...naming.warnings, ...flatWarnings(combined, peaks, (x) => pathAt(path, naming.nFibre, x))];
  const refined = refine(kernels, combined, path, naming, lit, pitch, peaks[0].sigma, options);
  const tramlines = assemble(combined, naming, refined, lit);
  return summarise(combined.name, tramlines, naming, warnings);
}

function typicalPitch(centre: number[]): number {
  return centre.length > 1 ? medianOf(centre.slice(1).map((y, k) => y - centre[k])) : 10;
}

function assemble(flat: Flat, naming: Naming, refined: Refined, lit: number[]): Tramlines {
  const { nFibre } = naming;
  const { centres, widths, groups } = refined;
  const state: FibreState[] = new Array(nFibre).fill("dead");
  const seenFrom = new Int32Array(nFibre);
  const seenTo = new Int32Array(nFibre).fill(-1);
  lit.forEach((k, i) => {
    const around = medianOf(refined.light.slice(Math.max(0, i - 15), i + 16));
    state[k] = refined.light[i] < DIM_SHARE * around ? "dim" : "lit";
    const first = refined.seen[i].indexOf(1);
    const last = refined.seen[i].lastIndexOf(1);
    if (first < 0) return;
    const [start, end] = [groups[first], groups[last]];
    seenFrom[k] = first === 0 ? 0 : Math.ceil(start.x - 0.5 * start.width);
    seenTo[k] = last === groups.length - 1 ? flat.nx - 1 : Math.floor(end.x + 0.5 * end.width);
  });
  const flatten = (set: SeriesSet) => Float64Array.from(set.coef.flatMap((coef) => [...coef]));
  return {
    nx: flat.nx,
    ny: flat.ny,
    nFibre,
    degree: centres.degree,
    fibre: Int32Array.from({ length: nFibre }, (_, k) => k + 1),
    state,
    block: naming.block,
    legendre: flatten(centres),
    seenFrom,
    seenTo,
    rms: centres.rms,
    nPoint: centres.nPoint,
    profile: {
      kind: "gaussian",
      sigma: flatten(widths),
      widthDegree: widths.degree,
      relativeError: refined.relativeError,
    },
    geometryDigest: flat.frame.geometry.digest,
  };
}

function summarise(name: string, tramlines: Tramlines, naming: Naming, warnings: string[]): Tracing {
  let sum = 0;
  let n = 0;
  let worst = 0;
  for (let k = 0; k < tramlines.nFibre; k++) {
    if (Number.isNaN(tramlines.rms[k])) continue;
    sum += tramlines.nPoint[k] * tramlines.rms[k] ** 2;
    n += tramlines.nPoint[k];
    if (!(tramlines.rms[k] <= tramlines.rms[worst])) worst = k;
  }
  const rms = Math.sqrt(sum / n);
  return {
    tramlines,
    naming: { score: naming.score, runnerUpScore: naming.runnerUpScore, readings: naming.readings },
    rms,
    worstRms: tramlines.rms[worst],
    worstFibre: worst + 1,
    degree: tramlines.degree,
    assumptions: [...naming.assumptions],
    warnings: [...warnings, ...scatterWarnings(name, tramlines, rms)],
  };
}

/** Scatter above which a trace is useless for weighting, px (common practice). */
const USELESS_RMS = 0.1;

function scatterWarnings(name: string, tramlines: Tramlines, rms: number): string[] {
  if (!(rms <= USELESS_RMS)) {
    return [
      `${name}: the centres scatter by ${rms.toFixed(2)} px about the tramlines, too much for weighted extraction (0.02 px is good, over ` +
        `${USELESS_RMS} px useless); look for a wrong dispersion axis, bad pixels or faint light.`,
    ];
  }
  const bad = Array.from(tramlines.rms.keys()).filter(
    (k) => tramlines.rms[k] > USELESS_RMS && tramlines.state[k] === "lit",
  );
  return bad.length > 0
    ? [`${name}: the centres of ${fibres(bad)} scatter by over ${USELESS_RMS} px; look at bad pixels there.`]
    : [];
}
