/** The spline through sky fibres' samples: knots, model variances and rejection found in turns.
 *
 * Samples beyond 5 σ are passed over, where σ² = v + (0.03 S)² + (0.05 px · dS/dx)²: at bright lines a fibre strays by its own line
 * width and by its wavelengths' error, and a sky whose brightest samples were clipped would be too faint there. */
import { clippedScatter } from "../detector/clip.js";
import {
  addNormal,
  addSamples,
  emptyNormal,
  type FittedSpline,
  type SplineNormal,
  solveNormal,
  splineValues,
} from "./bspline.js";
import { expectSky, type SkySamples } from "./skySamples.js";
import { fitAdaptedSpline } from "./splineKnots.js";
import { wavelengthBreaks } from "./wavelengthBreaks.js";

/** Pixels between the closest knots; the widest cells are 2^HALVINGS of them. */
const STEP = 0.7;
const HALVINGS = 5;
const CLIP = 5;
const TURNS = 6;
const LIGHT_ERROR = 0.03;
const PLACE_ERROR = 0.05;

export interface SkySpline {
  fit: FittedSpline;
  /** Of each fibre alone, in the order of the samples. */
  normals: SplineNormal[];
  total: SplineNormal;
  /** Of each fibre, nx: 1 for samples in use. */
  used: Uint8Array[];
  nClipped: number;
}

/** @param wavelengths nFibre × nx, for the width of a pixel. Sets the samples' variances and weights. */
export function fitSkySpline(fibres: SkySamples[], wavelengths: Float64Array, nx: number): SkySpline {
  const joined = (key: "x" | "y" | "weight") => Float64Array.from(fibres.flatMap((one) => Array.from(one[key])));
  const level = clippedScatter(joined("y")).mean;
  for (const one of fibres) expectSky(one, { level, wide: STEP * 2 ** HALVINGS });
  const weigh = (fit: FittedSpline) => {
    for (const one of fibres) expectSky(one, fit);
    return joined("weight");
  };
  const rows = fibres.map(({ fibre }) => fibre);
  const finest = wavelengthBreaks(wavelengths, nx, rows, STEP);
  const samples = { x: joined("x"), y: joined("y"), weight: joined("weight") };
  return settle(fibres, fitAdaptedSpline(samples, finest, HALVINGS, weigh));
}

/** Rejects and fits until nothing changes. */
function settle(fibres: SkySamples[], start: FittedSpline): SkySpline {
  let fit = start;
  let used: Uint8Array[] = [];
  for (let turn = 0; ; turn++) {
    for (const one of fibres) expectSky(one, fit);
    const next = fibres.map((one) => within(one, splineValues(fit, one.x)));
    const settled = used.length > 0 && next.every((mask, k) => mask.every((value, i) => value === used[k][i]));
    used = next;
    const normals = fibres.map((one, k) => normalOf(one, used[k], fit.knots));
    const total = emptyNormal(fit.knots);
    for (const one of normals) addNormal(total, one);
    fit = solveNormal(total);
    if (settled || turn === TURNS) return { fit, normals, total, used, nClipped: clippedIn(fibres, used) };
  }
}

function within({ y, variance, lasting }: SkySamples, model: Float64Array): Uint8Array {
  const last = y.length - 1;
  return Uint8Array.from(y, (value, i) => {
    if (!(variance[i] > 0)) return 0;
    const [low, high] = [Math.max(0, i - 1), Math.min(last, i + 1)];
    const slope = (model[high] - model[low]) / (high - low);
    const place = Number.isNaN(slope) ? 0 : PLACE_ERROR * slope;
    const light = LIGHT_ERROR * model[i];
    return (value - model[i]) ** 2 <= CLIP * CLIP * (variance[i] + lasting[i] + light * light + place * place) ? 1 : 0;
  });
}

function normalOf({ x, y, weight }: SkySamples, used: Uint8Array, knots: Float64Array): SplineNormal {
  const normal = emptyNormal(knots);
  addSamples(
    normal,
    x,
    y,
    weight.map((w, i) => w * used[i]),
  );
  return normal;
}

function clippedIn(fibres: SkySamples[], used: Uint8Array[]): number {
  let n = 0;
  fibres.forEach(({ variance }, k) => {
    for (let i = 0; i < variance.length; i++) if (variance[i] > 0 && used[k][i] === 0) n++;
  });
  return n;
}
