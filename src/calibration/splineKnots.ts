/** A spline through noisy samples that has knots where the samples ask for them: wide where nothing happens, so that noise
 * averages out, narrow at lines. It also bears with wild samples.
 *
 * Cells are halved from the widest down. At each width h the residuals of the fit so far are asked, by cubic B-splines of
 * that width all along, whether a bump of this size is left in them:
 *
 *     z_j = Σ w ψ(r) B_j / √(Σ w B_j²),    ψ clips at ±2.5 σ
 *
 * which scatters by less than 1 about 0 if nothing is left; where |z_j| > 3 the cells below B_j are cut to h. Clipping keeps
 * a single wild sample from being taken for a line, which shows in all fibres. Fits weigh by w·min(1, 2.5/|r|·σ) (Huber 1964,
 * Ann. Math. Stat. 35, 73). The limits are choices, tried on simulated nights. */
import {
  clampedKnots,
  type FittedSpline,
  fitOnBases,
  type SplineBases,
  splineBases,
  valuesOnBases,
} from "./bspline.js";

const CLIP = 2.5;
const ASK = 3;
const TURNS = 2;

export interface Samples {
  /** n each; weight: inverse variance, 0 for samples to pass over. */
  x: Float64Array;
  y: Float64Array;
  weight: Float64Array;
}

export interface AdaptedSpline extends FittedSpline {
  /** Cells between knots. */
  nCell: number;
}

/** @param finest rising breaks [nFine + 1] of the narrowest cells; knots are some of them.
 * @param halvings the widest cells hold 2^halvings of the finest.
 * @param weigh asked with the present fit for the samples' weights, where they hang on the model. */
export function fitAdaptedSpline(
  samples: Samples,
  finest: Float64Array,
  halvings: number,
  weigh?: (fit: FittedSpline) => Float64Array,
): AdaptedSpline {
  const size = new Int32Array(finest.length - 1).fill(2 ** halvings);
  const filled = samplesByCell(samples, finest);
  const basesNow = () => splineBases(knotsOf(finest, size, filled), samples.x);
  let weight = samples.weight;
  let bases = basesNow();
  let fit = robustFitOn(bases, samples.y, weight);
  for (let level = halvings - 1; level >= 0; level--) {
    const width = 2 ** level;
    const breaks = finest.filter((_, i) => i % width === 0 || i === finest.length - 1);
    const bumps = splineBases(clampedKnots(breaks), samples.x);
    for (let turn = 0; turn < TURNS; turn++) {
      weight = weigh === undefined ? weight : weigh(fit);
      if (!narrow(samples.y, weight, valuesOnBases(bases, fit.coef), bumps, size, width)) break;
      bases = basesNow();
      fit = robustFitOn(bases, samples.y, weight);
    }
  }
  return Object.assign(fit, { nCell: fit.knots.length - 7 });
}

/** Three fits, each weighing down what the one before missed. */
export function robustFit({ x, y }: Samples, weight: Float64Array, knots: Float64Array): FittedSpline {
  return robustFitOn(splineBases(knots, x), y, weight);
}

function robustFitOn(bases: SplineBases, y: Float64Array, weight: Float64Array): FittedSpline {
  let fit = fitOnBases(bases, y, weight);
  const lowered = new Float64Array(weight.length);
  for (let turn = 0; turn < 2; turn++) {
    const model = valuesOnBases(bases, fit.coef);
    for (let i = 0; i < weight.length; i++) {
      const w = weight[i];
      const pull = Math.abs(y[i] - model[i]) * Math.sqrt(w);
      lowered[i] = pull > CLIP ? (w * CLIP) / pull : w;
    }
    fit = fitOnBases(bases, y, lowered);
  }
  return fit;
}

/** Cuts the cells below bumps of width `width` (in finest cells) that the model left; true if any was. */
function narrow(
  y: Float64Array,
  weight: Float64Array,
  model: Float64Array,
  bumps: SplineBases,
  size: Int32Array,
  width: number,
): boolean {
  const score = new Float64Array(bumps.knots.length - 4);
  const square = new Float64Array(score.length);
  const { values } = bumps;
  for (let i = 0; i < y.length; i++) {
    const first = bumps.first[i];
    if (first < 0 || !(weight[i] > 0) || Number.isNaN(model[i])) continue;
    const root = Math.sqrt(weight[i]);
    const pull = Math.max(-CLIP, Math.min(CLIP, (y[i] - model[i]) * root));
    for (let a = 0; a < 4; a++) {
      const value = values[4 * i + a];
      score[first + a] += pull * root * value;
      square[first + a] += weight[i] * value * value;
    }
  }
  let any = false;
  for (let j = 0; j < score.length; j++) {
    if (!(Math.abs(score[j]) > ASK * Math.sqrt(square[j]))) continue;
    // B_j lives on the breaks j − 3 … j + 1 of its own width.
    const [from, to] = [Math.max(0, (j - 3) * width), Math.min(size.length, (j + 1) * width)];
    for (let cell = from; cell < to; cell++) {
      if (size[cell] <= width) continue;
      size[cell] = width;
      any = true;
    }
  }
  return any;
}

/** Samples with weight below each finest break: [nFine + 1], rising. */
function samplesByCell({ x, weight }: Samples, finest: Float64Array): Int32Array {
  const last = finest.length - 1;
  const below = new Int32Array(finest.length);
  let cell = 1;
  for (let i = 0; i < x.length; i++) {
    if (!(weight[i] > 0 && x[i] <= finest[last])) continue;
    // The first break above it; neighbouring samples mostly lie in neighbouring cells.
    while (cell > 0 && x[i] < finest[cell - 1]) cell--;
    while (cell < last && x[i] >= finest[cell]) cell++;
    below[cell]++;
  }
  for (let i = 1; i <= last; i++) below[i] += below[i - 1];
  return below;
}

/** Breaks of the present cells; a cell with fewer than two samples is joined to the one before it, since nothing would tell
 * its function's height. */
function knotsOf(finest: Float64Array, size: Int32Array, below: Int32Array): Float64Array {
  const breaks = [0];
  for (let i = 1; i < size.length; i++) {
    const width = Math.min(size[i - 1], size[i]);
    if (i % width === 0 && below[i] - below[breaks[breaks.length - 1]] >= 2) breaks.push(i);
  }
  const end = size.length;
  while (breaks.length > 1 && below[end] - below[breaks[breaks.length - 1]] < 2) breaks.pop();
  return clampedKnots([...breaks, end].map((i) => finest[i]));
}
