/** Is the sky right? Each sky fibre is left out in turn and foretold from the others: what is left of it, against the noise of
 * both, between the sky's lines and at them. A fibre that sees an object, or whose throughput is not as measured, shows by the
 * light that is left between the lines. */
import { medianOf, SIGMA_PER_MAD } from "../detector/clip.js";
import {
  addNormal,
  type BSpline,
  emptyNormal,
  type FittedSpline,
  solveNormal,
  splineCovariances,
  splineValues,
} from "./bspline.js";
import { cellPixels, type SkySamples } from "./skySamples.js";
import type { SkySpline } from "./skySpline.js";
import { wavelengthBreaks } from "./wavelengthBreaks.js";

/** Where the sky's lines are, on breaks one pixel apart. */
export interface SkyLinesSeen {
  breaks: Float64Array;
  /** A cell each: 1 between lines. */
  between: Uint8Array;
}

export interface FibreCheck {
  /** Row, from 0. */
  fibre: number;
  /** Light left between the lines, as a share of the sky there, and its standard error. */
  residual: number;
  error: number;
  /** Robust standard deviation about 0 of (left) / σ; NaN without samples. */
  pullBetween: number;
  pullAtLines: number;
  nBetween: number;
  nAtLines: number;
}

/** Half of the window, in pixels, over which the light between lines is taken for level. */
const HALF_WINDOW = 40;
/** A line rises above that by so much of it, or by so many σ of one sample. */
const LINE_SHARE = 0.05;
const LINE_SIGMA = 0.5;
/** Cells beside a line that belong to it. */
const FOOT = 2;

/** @param sigma of one sample between the lines. */
export function findSkyLines(
  spline: BSpline,
  wavelengths: Float64Array,
  nx: number,
  fibres: number[],
  sigma: number,
): SkyLinesSeen {
  const breaks = wavelengthBreaks(wavelengths, nx, fibres, 1);
  const light = splineValues(
    spline,
    breaks.subarray(1).map((upper, i) => 0.5 * (upper + breaks[i])),
  );
  const line = light.map((value, i) => {
    const level = medianOf(light.subarray(Math.max(0, i - HALF_WINDOW), i + HALF_WINDOW + 1));
    return Math.abs(value - level) > Math.max(LINE_SHARE * Math.abs(level), LINE_SIGMA * sigma) ? 1 : 0;
  });
  const between = Uint8Array.from(line, (_, i) =>
    line.subarray(Math.max(0, i - FOOT), i + FOOT + 1).includes(1) ? 0 : 1,
  );
  return { breaks, between };
}

/** True between lines; false at them and where no sky was seen. */
export function isBetween({ breaks, between }: SkyLinesSeen, wavelength: number): boolean {
  let [low, high] = [0, between.length - 1];
  if (!(wavelength >= breaks[0] && wavelength <= breaks[between.length])) return false;
  while (low < high) {
    const middle = (low + high + 1) >> 1;
    if (breaks[middle] <= wavelength) low = middle;
    else high = middle - 1;
  }
  return between[low] === 1;
}

/** Every fibre of the spline against the spline without it. */
export function checkAll(fibres: SkySamples[], spline: SkySpline, lines: SkyLinesSeen): FibreCheck[] {
  return fibres.map((one, k) => {
    const others = emptyNormal(spline.fit.knots);
    addNormal(others, spline.total);
    addNormal(others, spline.normals[k], -1);
    return checkFibre(one, solveNormal(others), lines);
  });
}

/** A fibre against a sky that it has no part in. */
export function checkFibre(samples: SkySamples, others: FittedSpline, lines: SkyLinesSeen): FibreCheck {
  const { fibre, x, y, variance, lasting } = samples;
  const sky = splineValues(others, x);
  const error = splineCovariances(others, x, x);
  const [atLines, away]: [number[], number[]] = [[], []];
  const nCell = cellPixels(others, x);
  const sum = { left: 0, light: 0, weight: 0, lasting: 0, cells: 0 };
  for (let i = 0; i < x.length; i++) {
    if (!(variance[i] > 0) || !(error[i] >= 0)) continue;
    const sigma = Math.sqrt(variance[i] + lasting[i] + error[i]);
    const pull = (y[i] - sky[i]) / sigma;
    (isBetween(lines, x[i]) ? away : atLines).push(pull);
    if (!isBetween(lines, x[i])) continue;
    const weight = 1 / variance[i];
    // A hit must not pass for an object, which shows all along.
    sum.left += weight * sigma * Math.max(-4, Math.min(4, pull));
    sum.light += weight * sky[i];
    sum.weight += weight;
    sum.lasting += weight * Math.sqrt(lasting[i]);
    // The sky's own error goes on as far as its knots are apart.
    sum.cells += weight * weight * error[i] * nCell[i];
  }
  return {
    fibre,
    residual: sum.left / sum.light,
    error: Math.sqrt(sum.weight + sum.lasting * sum.lasting + sum.cells) / Math.abs(sum.light),
    ...{ pullBetween: spread(away), pullAtLines: spread(atLines), nBetween: away.length, nAtLines: atLines.length },
  };
}

/** Robust standard deviation about 0. */
function spread(pulls: number[]): number {
  return SIGMA_PER_MAD * medianOf(pulls.map(Math.abs));
}

/** The fibre that strays furthest from the others' light: by over 1 % of the sky, and by over 5 of its standard errors, or of
 * the errors' own scatter where they are found too small. Undefined when there is none, or when too few would be left to tell
 * which one is wrong. */
export function oddFibre(checks: FibreCheck[]): FibreCheck | undefined {
  if (checks.length < 4) return undefined;
  const middle = medianOf(checks.map(({ residual }) => residual));
  const away = checks.map((check) => ({ check, pull: Math.abs(check.residual - middle) / check.error }));
  const scatter = Math.max(1, SIGMA_PER_MAD * medianOf(away.map(({ pull }) => pull)));
  const odd = away.filter(({ check, pull }) => pull > 5 * scatter && Math.abs(check.residual - middle) > 0.01);
  return odd.sort((a, b) => b.pull - a.pull)[0]?.check;
}
