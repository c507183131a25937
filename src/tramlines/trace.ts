/** From fibre flats to tramlines: find the fibres in a cut, name them, walk outward, centre all of them jointly in
 * groups of columns, and put a Legendre series through each. */
import { medianOf } from "../detector/clip.js";
import type { Frame } from "../detector/frame.js";
import { type Kernels, loadKernels } from "../kernels/module.js";
import { legendreArgument, legendreValue } from "../reference/legendre.js";
import { cutThrough, findPeaks, type Peak } from "./find.js";
import { type ColumnGroup, combineFlats, type Flat } from "./flat.js";
import { cutIntoGroups, type Guess, type Measured, Meter, START_ERROR } from "./measure.js";
import { flatWarnings, requireFlat } from "./misuse.js";
import { type Naming, nameFibres, numberFibres, type SlitLayout } from "./name.js";
import { type Points, SeriesFitter, type SeriesSet } from "./series.js";
import type { FibreState, Tramlines } from "./tramlines.js";
import { type Path, walkOutward } from "./walk.js";

export interface TraceOptions {
  /** Degree of the tramlines' series; default: the data choose, up to 8. */
  degree?: number;
}

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

const MAX_DEGREE = 8;
/** Degree of the series that guide the rounds in between. */
const GUIDE_DEGREE = 6;
const WIDTH_DEGREE = 3;
/** Errors of centre and width that no noise model knows of, px. */
const CENTRE_FLOOR = 0.003;
const WIDTH_FLOOR = 0.005;
/** A point counts when its light is this many σ, and this share of the fibre's median. */
const KAPPA_SEEN = 6;
const SEEN_SHARE = 0.1;
/** A fibre with less than this share of the light around it is dim. */
const DIM_SHARE = 0.3;

/** Traces fibre flats of one readout window. `layout`: the slit; without it fibres are numbered as found.
 * @throws TraceError when the frame is no usable fibre flat, NamingError when fibres cannot be named with certainty. */
export async function traceFlat(
  flat: Frame | Frame[],
  layout?: SlitLayout,
  options: TraceOptions = {},
): Promise<Tracing> {
  const kernels = await loadKernels();
  const combined = combineFlats([flat].flat());
  requireFlat(combined);
  const cut = cutThrough(combined);
  const peaks = findPeaks(kernels, cut, combined.name);
  const naming = layout === undefined ? numberFibres(peaks, combined.name) : nameFibres(peaks, layout, combined.name);
  const lit = Array.from(naming.peak.keys()).filter((k) => naming.peak[k] >= 0);
  const pitch = typicalPitch(lit.map((k) => naming.centre[k]));
  const path = walkOutward(kernels, combined, naming.centre, lit, cut.x, cut.slope, pitch);
  const warnings = [...naming.warnings, ...flatWarnings(combined, peaks, (x) => pathAt(path, naming.nFibre, x))];
  const refined = refine(kernels, combined, path, naming, lit, pitch, peaks[0].sigma, options.degree);
  const tramlines = assemble(combined, naming, refined, lit);
  return summarise(tramlines, naming, peaks, warnings);
}

function typicalPitch(centre: number[]): number {
  return centre.length > 1 ? medianOf(centre.slice(1).map((y, k) => y - centre[k])) : 10;
}

/** Where the walk saw all fibres in column x, linear between its steps. */
function pathAt(path: Path, nFibre: number, x: number): Float64Array {
  const n = path.x.length;
  let step = 0;
  while (step < n - 2 && path.x[step + 1] < x) step++;
  const next = Math.min(n - 1, step + 1);
  const span = path.x[next] - path.x[step];
  const share = span > 0 ? (x - path.x[step]) / span : 0;
  return Float64Array.from({ length: nFibre }, (_, k) => {
    const here = path.centre[step * nFibre + k];
    return here + share * (path.centre[next * nFibre + k] - here);
  });
}

interface Refined {
  centres: SeriesSet;
  widths: SeriesSet;
  groups: ColumnGroup[];
  /** [lit fibre][group]: 1 where the fibre was seen. */
  seen: Uint8Array[];
  /** Median light of each lit fibre, e⁻ a column. */
  light: Float64Array;
  relativeError: number;
}

/** Three rounds over the whole flat: centres about the walk; centres and widths about the series through them, with pixels
 * off the model rejected; centres again, with each fibre's own width. */
function refine(
  kernels: Kernels,
  flat: Flat,
  path: Path,
  naming: Naming,
  lit: number[],
  pitch: number,
  sigma: number,
  degree: number | undefined,
): Refined {
  const { nx, ny } = flat;
  const groups = cutIntoGroups(flat, steepest(path, naming.nFibre));
  const meter = new Meter(kernels, groups, ny, lit.length, pitch, sigma);
  const fitter = (points: Points) => new SeriesFitter(kernels, points, MAX_DEGREE);
  const walked = guessFromPath(path, groups, naming.nFibre, lit, sigma);

  let measured = meter.measure(walked, false, START_ERROR, false);
  const guideDegree = Math.min(GUIDE_DEGREE, Math.max(1, Math.floor(groups.length / 6)));
  let centres = fitter(centrePoints(measured, groups, nx, naming, lit)).fit(guideDegree);
  let guess = guessFromSeries(centres, undefined, groups, nx, lit, sigma);
  measured = meter.measure(guess, true, START_ERROR, true);
  const widthDegree = Math.min(WIDTH_DEGREE, Math.max(0, Math.floor(groups.length / 8)));
  const widths = fitter(widthPoints(measured, groups, nx, naming, lit)).fit(widthDegree);
  centres = fitter(centrePoints(measured, groups, nx, naming, lit)).fit(guideDegree);
  guess = guessFromSeries(centres, widths, groups, nx, lit, sigma);
  measured = meter.measure(guess, false, Math.max(0.002, measured.relativeError), true);

  const points = centrePoints(measured, groups, nx, naming, lit);
  const last = fitter(points);
  const most = Math.min(MAX_DEGREE, Math.max(1, Math.floor(groups.length / 4)));
  const chosen = degree ?? last.chooseDegree(1, most);
  return {
    centres: last.fit(chosen),
    widths,
    groups,
    seen: lit.map((k) => Uint8Array.from(points.weight[k], (w) => (w > 0 ? 1 : 0))),
    light: Float64Array.from(lit, (_, i) => medianOf(measured.light.map((light) => light[i]))),
    relativeError: measured.relativeError,
  };
}

function steepest(path: Path, nFibre: number): number {
  let most = 0;
  for (let step = 1; step < path.x.length; step++) {
    const run = path.x[step] - path.x[step - 1];
    for (let k = 0; k < nFibre; k += 7) {
      const climb = Math.abs(path.centre[step * nFibre + k] - path.centre[(step - 1) * nFibre + k]) / run;
      most = Math.max(most, climb);
    }
  }
  return most;
}

function guessFromPath(path: Path, groups: ColumnGroup[], nFibre: number, lit: number[], sigma: number): Guess {
  const at = groups.map((group) => pathAt(path, nFibre, group.x));
  const ahead = groups.map((group) => pathAt(path, nFibre, group.x + 16));
  const behind = groups.map((group) => pathAt(path, nFibre, group.x - 16));
  return {
    centre: at.map((all) => Float64Array.from(lit, (k) => all[k])),
    sigma: groups.map(() => new Float64Array(lit.length).fill(sigma)),
    slope: at.map((_, g) => Float64Array.from(lit, (k) => (ahead[g][k] - behind[g][k]) / 32)),
  };
}

function guessFromSeries(
  centres: SeriesSet,
  widths: SeriesSet | undefined,
  groups: ColumnGroup[],
  nx: number,
  lit: number[],
  sigma: number,
): Guess {
  const value = (set: SeriesSet, k: number, x: number) => legendreValue(set.coef[k], legendreArgument(x, nx));
  return {
    centre: groups.map(({ x }) => Float64Array.from(lit, (k) => value(centres, k, x))),
    sigma: groups.map(({ x }) =>
      Float64Array.from(lit, (k) =>
        widths === undefined ? sigma : Math.max(0.6 * sigma, Math.min(1.8 * sigma, value(widths, k, x))),
      ),
    ),
    slope: groups.map(({ x }) =>
      Float64Array.from(lit, (k) => 0.5 * (value(centres, k, x + 1) - value(centres, k, x - 1))),
    ),
  };
}

function centrePoints(measured: Measured, groups: ColumnGroup[], nx: number, naming: Naming, lit: number[]): Points {
  return pointsOf(measured, measured.centre, measured.centreVariance, CENTRE_FLOOR, groups, nx, naming, lit);
}

function widthPoints(measured: Measured, groups: ColumnGroup[], nx: number, naming: Naming, lit: number[]): Points {
  return pointsOf(measured, measured.sigma, measured.sigmaVariance, WIDTH_FLOOR, groups, nx, naming, lit);
}

/** Values of all fibres, [fibre][group], with weight where the fibre's light is certain. */
function pointsOf(
  measured: Measured,
  value: Float64Array[],
  variance: Float64Array[],
  floor: number,
  groups: ColumnGroup[],
  nx: number,
  naming: Naming,
  lit: number[],
): Points {
  const nGroup = groups.length;
  const points: Points = {
    x: Float64Array.from(groups, (group) => group.x),
    nx,
    value: Array.from({ length: naming.nFibre }, () => new Float64Array(nGroup)),
    weight: Array.from({ length: naming.nFibre }, () => new Float64Array(nGroup)),
    slit: naming.centre,
  };
  lit.forEach((k, i) => {
    const faintest = SEEN_SHARE * medianOf(measured.light.map((light) => light[i]));
    for (let g = 0; g < nGroup; g++) {
      const light = measured.light[g][i];
      const isSeen = light > faintest && light > KAPPA_SEEN * Math.sqrt(measured.lightVariance[g][i]);
      if (!isSeen || !Number.isFinite(value[g][i]) || !(variance[g][i] < 0.04)) continue;
      points.value[k][g] = value[g][i];
      points.weight[k][g] = 1 / (variance[g][i] + floor * floor);
    }
  });
  return points;
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

function summarise(tramlines: Tramlines, naming: Naming, peaks: Peak[], warnings: string[]): Tracing {
  let sum = 0;
  let n = 0;
  let worst = 0;
  for (let k = 0; k < tramlines.nFibre; k++) {
    if (Number.isNaN(tramlines.rms[k])) continue;
    sum += tramlines.nPoint[k] * tramlines.rms[k] ** 2;
    n += tramlines.nPoint[k];
    if (!(tramlines.rms[k] <= tramlines.rms[worst])) worst = k;
  }
  return {
    tramlines,
    naming: { score: naming.score, runnerUpScore: naming.runnerUpScore, readings: naming.readings },
    rms: Math.sqrt(sum / n),
    worstRms: tramlines.rms[worst],
    worstFibre: worst + 1,
    degree: tramlines.degree,
    assumptions: [...naming.assumptions],
    warnings: peaks.length > 0 ? warnings : [],
  };
}
