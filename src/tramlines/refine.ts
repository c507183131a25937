/** From the walk to series: centres and widths of all lit fibres over the whole flat, in rounds that each start from the
 * series through the last one's. */
import type { Kernels } from "../kernels/module.js";
import { legendreArgument, legendreBasis } from "../reference/legendre.js";
import type { ColumnGroup, Flat } from "./flat.js";
import { cutIntoGroups, type Guess, type Measured, Meter, START_ERROR } from "./measure.js";
import type { Naming } from "./name.js";
import { type Points, SeriesFitter, type SeriesSet } from "./series.js";
import { type Path, pathAt } from "./walk.js";

const MAX_DEGREE = 8;
/** Degree of the series that guide the rounds in between. */
const GUIDE_DEGREE = 6;
const WIDTH_DEGREE = 3;
/** Groups that suffice for those, at the least. */
const GUIDES = 40;
/** Errors of centre and width that no noise model knows of, px. */
const CENTRE_FLOOR = 0.003;
const WIDTH_FLOOR = 0.005;
/** A point counts when its light is this many σ, and this share of the fibre's median. */
const KAPPA_SEEN = 6;
const SEEN_SHARE = 0.1;
export interface RefineOptions {
  /** Degree of the tramlines' series; default: the data choose, up to 8. */
  degree?: number;
  /** How the last centres are taken; "joint" unless fibres stand wide apart and the centroid itself is wanted. */
  centring?: "joint" | "centroid";
}

/** Window of the centroids, ± this share of the pitch. */
const CENTROID_SHARE = 0.5;

export interface Refined {
  centres: SeriesSet;
  widths: SeriesSet;
  groups: ColumnGroup[];
  /** [lit fibre][group]: 1 where the fibre was seen. */
  seen: Uint8Array[];
  /** Median light of each lit fibre, e⁻ a column. */
  light: Float64Array;
  relativeError: number;
}

/** Centres about the walk in some groups; centres and widths about the series through them, first in those, then in all, with
 * pixels off the model rejected; centres again in all, with each fibre's own width. */
export function refine(
  kernels: Kernels,
  flat: Flat,
  path: Path,
  naming: Naming,
  lit: number[],
  pitch: number,
  sigma: number,
  options: RefineOptions,
): Refined {
  const { nx, ny } = flat;
  const steep = steepest(path, naming.nFibre);
  const groups = cutIntoGroups(kernels, flat, steep);
  const meter = new Meter(kernels, groups, ny, lit.length, { pitch, sigma, steepest: steep });
  const fitter = (points: Points) => new SeriesFitter(kernels, points, MAX_DEGREE);
  const oneIn = Math.max(1, Math.floor(groups.length / GUIDES));
  const guides = meter.groupsOf(oneIn);
  const start = { relativeError: START_ERROR, reject: false, oneIn };

  let guess = guessFromPath(path, guides, naming.nFibre, lit, sigma);
  let measured = meter.measure(guess, { ...start, nPar: 2, nRound: 2 });
  const guideDegree = Math.min(GUIDE_DEGREE, Math.max(1, Math.floor(guides.length / 6)));
  let centres = fitter(centrePoints(measured, guides, nx, naming, lit)).fit(guideDegree);
  const widthDegree = Math.min(WIDTH_DEGREE, Math.max(0, Math.floor(guides.length / 8)));
  let widths: SeriesSet | undefined;
  for (const [some, rounds] of [
    [guides, { ...start, nPar: 3, nRound: 1 }],
    [groups, { ...start, nPar: 3, nRound: 2, reject: true, oneIn: 1 }],
  ] as const) {
    guess = guessFromSeries(centres, widths, some, nx, lit, sigma);
    measured = meter.measure(guess, rounds);
    widths = fitter(widthPoints(measured, some, nx, naming, lit)).fit(widthDegree);
    centres = fitter(centrePoints(measured, some, nx, naming, lit)).fit(guideDegree);
  }
  guess = guessFromSeries(centres, widths, groups, nx, lit, sigma);
  const relativeError = Math.max(0.002, measured.relativeError);
  measured = meter.measure(guess, { nPar: 2, nRound: 2, relativeError, reject: true, oneIn: 1 });

  if (options.centring === "centroid") {
    measured = meter.centroids(kernels, guess, measured, CENTROID_SHARE * pitch);
  }
  const points = centrePoints(measured, groups, nx, naming, lit);
  const last = fitter(points);
  const most = Math.min(MAX_DEGREE, Math.max(1, Math.floor(groups.length / 4)));
  const chosen = options.degree ?? last.chooseDegree(1, most);
  return {
    centres: last.fit(chosen),
    widths: widths as SeriesSet,
    groups,
    seen: lit.map((k) => Uint8Array.from(points.weight[k], (w) => (w > 0 ? 1 : 0))),
    light: measured.medianLight,
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
  const centreAt = seriesOf(centres, lit, nx);
  const widthAt = widths === undefined ? () => new Float64Array(lit.length).fill(sigma) : seriesOf(widths, lit, nx);
  const guess: Guess = { centre: [], sigma: [], slope: [] };
  for (const { x } of groups) {
    const [centre, ahead, behind] = [centreAt(x), centreAt(x + 1), centreAt(x - 1)];
    const width = widthAt(x);
    const slope = new Float64Array(lit.length);
    for (let i = 0; i < lit.length; i++) {
      slope[i] = 0.5 * (ahead[i] - behind[i]);
      width[i] = Math.max(0.6 * sigma, Math.min(1.8 * sigma, width[i]));
    }
    guess.centre.push(centre);
    guess.slope.push(slope);
    guess.sigma.push(width);
  }
  return guess;
}

/** The series of some fibres in column x. */
function seriesOf(set: SeriesSet, fibres: number[], nx: number): (x: number) => Float64Array {
  const nCoef = set.degree + 1;
  const coef = Float64Array.from(fibres.flatMap((k) => [...set.coef[k]]));
  return (x) => {
    const basis = legendreBasis(legendreArgument(x, nx), nCoef);
    const values = new Float64Array(fibres.length);
    for (let i = 0, at = 0; i < values.length; i++) {
      for (let j = 0; j < nCoef; j++, at++) values[i] += basis[j] * coef[at];
    }
    return values;
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
    const faintest = SEEN_SHARE * measured.medianLight[i];
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
