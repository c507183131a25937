/** How much light each frame of a field holds: time and transparency in one number, and each fibre's departure from it.
 *
 *     d_i(k, x) = s_i · c_ik(x) · μ(k, x) + noise,      c_ik = a + b·t,  t from −1 to 1 along the columns
 *
 * μ, the median of the frames over their scales, has noise of its own, which least squares would take for signal. So
 * fits go by an instrument: h(x), made of μ in the columns beside x, whose noise has no part in column x,
 *
 *     Σ h·(d − s·c·μ) = 0,   Σ h·t·(d − s·c·μ) = 0
 *
 * which has no such bias (instrumental variables: Kendall & Stuart, The Advanced Theory of Statistics, vol. 2, chapter 29).
 * A frame's scale is the weighted median over its fibres, so that a few fibres that lost their star do not count. */
import { median, medianInPlace, weightedMedian } from "../reference/median.js";
import type { AlignedFrame } from "./alignFrames.js";

export interface FrameScale {
  /** Against the first frame. */
  scale: number;
  error: number;
  from: "light" | "exposure time" | "nothing";
  /** Robust scatter of the fibres' own factors about 1; NaN with fewer than four fibres that tell. */
  scatter: number;
  /** c at the middle column and its change to the last: [nFibre × 2]; 1 and 0 where nothing speaks against it. */
  fibre: Float64Array;
}

const turns = 4;
/** Columns to each side that make the instrument. */
const beside = 3;
/** A fibre's factor must be known to this to be asked for the frame's scale. */
const knownTo = 0.2;
/** By how much fibres may differ for reasons of guiding and seeing, in their weights. */
const guiding = 0.02;
/** χ² of two degrees of freedom beyond which a fibre has a factor of its own: 1 in 270 000 by chance. */
const significant = 25;

/** @throws nothing; what cannot be fitted is taken from the exposure times. */
export function fitScales(frames: AlignedFrame[]): FrameScale[] {
  const { nFibre, nx } = frames[0].spectra;
  const byTime = frames.map(({ exposureSeconds }) => exposureSeconds / frames[0].exposureSeconds);
  const scales: FrameScale[] = byTime.map((ratio) => ({
    ...{ scale: Number.isFinite(ratio) ? ratio : 1, error: Number.NaN, scatter: Number.NaN },
    from: Number.isFinite(ratio) ? "exposure time" : "nothing",
    fibre: Float64Array.from({ length: 2 * nFibre }, (_, j) => 1 - (j % 2)),
  }));
  const model = new Float64Array(nx);
  for (let turn = 0; turn < turns; turn++) {
    const fits = frames.map((): FibreFit[] => []);
    for (let k = 0; k < nFibre; k++) {
      medianModel(frames, scales, k, model);
      const instrument = instrumentOf(model);
      frames.forEach((frame, i) => {
        fits[i].push(fitFibre(frame, k, scales[i].scale, instrument));
      });
    }
    const last = turn === turns - 1;
    scales.forEach((own, i) => {
      const factor = commonFactor(own, fits[i]);
      if (last) keepFibres(own, fits[i], factor);
      // A frame without light keeps a scale that is too small to count.
      else own.scale = Math.max(own.scale * factor, 1e-6);
    });
    if (!last) normalise(scales);
  }
  // Against the first frame, whose own error all others share.
  const [first] = scales;
  for (const own of scales.slice(1)) own.error = Math.sqrt(own.error ** 2 + (own.scale * first.error) ** 2);
  first.error = 0;
  return scales;
}

/** Median over the frames of d/s, [nx]; NaN where none is usable. Of two frames the first, so that the other is held against it. */
export function medianModel(frames: AlignedFrame[], scales: FrameScale[], k: number, model: Float64Array): void {
  const nx = model.length;
  const ratios = new Float64Array(frames.length);
  for (let x = 0; x < nx; x++) {
    let n = 0;
    for (let i = 0; i < frames.length; i++) {
      if (frames[i].usable[k * nx + x] && scales[i].scale > 0)
        ratios[n++] = frames[i].spectra.flux[k * nx + x] / scales[i].scale;
    }
    model[x] = n === 0 ? Number.NaN : frames.length === 2 ? ratios[0] : medianInPlace(ratios, n);
  }
}

interface FibreFit {
  /** c for the whole fibre, and its error; NaN where it does not tell. */
  factor: number;
  error: number;
  /** a, b of c = a + b·t, and χ² of them against 1 and 0. */
  slope: [number, number];
  chiSquare: number;
}

/** Sums of the fit: h·s·μ, h·t·s·μ, h·t²·s·μ; h·d, h·t·d; h²·v, h²·t·v, h²·t²·v. */
interface Sums {
  m: [number, number, number];
  d: [number, number];
  v: [number, number, number];
}

function fitFibre(frame: AlignedFrame, k: number, scale: number, instrument: Instrument): FibreFit {
  const { usable } = frame;
  const nx = instrument.model.length;
  const flux = frame.spectra.flux.subarray(k * nx, (k + 1) * nx);
  const variance = frame.spectra.variance.subarray(k * nx, (k + 1) * nx);
  const row = { flux, variance, usable: usable.subarray(k * nx, (k + 1) * nx), scale };
  let factor = startingFactor(row, instrument.model);
  const floor = fixedVariance(row);
  let sums: Sums | undefined;
  for (let turn = 0; turn < 2; turn++) {
    sums = gatherSums(row, instrument, factor, floor);
    factor = sums.d[0] / sums.m[0];
    if (!Number.isFinite(factor)) return { factor: Number.NaN, error: Number.NaN, slope: [1, 0], chiSquare: 0 };
  }
  const { m, v } = sums!;
  return { factor, error: Math.sqrt(v[0]) / Math.abs(m[0]), ...slopeOf(sums!) };
}

/** One fibre of a frame. */
interface Row {
  flux: Float32Array | Float64Array;
  variance: Float32Array | Float64Array;
  usable: Uint8Array;
  scale: number;
}

const block = 16;

/** Ratio of the light in blocks of columns, each the median of its columns, which no hit moves; 1 where there is too little. */
function startingFactor({ flux, variance, usable, scale }: Row, model: Float64Array): number {
  const values = [0, 1, 2].map(() => new Float64Array(block));
  let [own, expected, noise] = [0, 0, 0];
  for (let from = 0; from + block <= model.length; from += block) {
    let n = 0;
    for (let x = from; x < from + block; x++) {
      if (!usable[x] || Number.isNaN(model[x])) continue;
      values[0][n] = flux[x];
      values[1][n] = model[x];
      values[2][n++] = variance[x];
    }
    if (n < block / 2) continue;
    own += medianInPlace(values[0], n);
    expected += scale * medianInPlace(values[1], n);
    // A median's variance is π/2 of a mean's.
    noise += (1.57 * medianInPlace(values[2], n)) / n;
  }
  return expected > 5 * Math.sqrt(noise) ? own / expected : 1;
}

function gatherSums(
  { flux, variance, usable, scale }: Row,
  instrument: Instrument,
  factor: number,
  floor: number,
): Sums {
  const { model, mean, most } = instrument;
  const nx = model.length;
  let [m0, m1, m2, d0, d1, v0, v1, v2] = [0, 0, 0, 0, 0, 0, 0, 0];
  for (let x = 0; x < nx; x++) {
    const near = mean[x];
    if (!usable[x] || Number.isNaN(model[x] + near)) continue;
    const expected = scale * model[x];
    // A hit is far off both noise and the light nearby; what differs by less is what is being fitted.
    if (Math.abs(flux[x] - factor * expected) > 5 * Math.sqrt(variance[x]) + 0.3 * scale * most[x]) continue;
    const h = near / (floor + scale * Math.max(near, 0));
    const t = (2 * x) / (nx - 1) - 1;
    m0 += h * expected;
    m1 += h * t * expected;
    m2 += h * t * t * expected;
    d0 += h * flux[x];
    d1 += h * t * flux[x];
    v0 += h * h * variance[x];
    v1 += h * h * t * variance[x];
    v2 += h * h * t * t * variance[x];
  }
  return { m: [m0, m1, m2], d: [d0, d1], v: [v0, v1, v2] };
}

/** The model, its mean in the columns beside each, and the largest value there: [nx]. */
interface Instrument {
  model: Float64Array;
  mean: Float64Array;
  most: Float64Array;
}

function instrumentOf(model: Float64Array): Instrument {
  const nx = model.length;
  const [mean, most] = [new Float64Array(nx), new Float64Array(nx)];
  for (let x = 0; x < nx; x++) {
    let [sum, n] = [0, 0];
    for (let j = Math.max(0, x - beside); j <= Math.min(nx - 1, x + beside); j++) {
      if (j === x || Number.isNaN(model[j])) continue;
      sum += model[j];
      n++;
      if (Math.abs(j - x) < 3) most[x] = Math.max(most[x], Math.abs(model[j]));
    }
    mean[x] = n === 0 ? Number.NaN : sum / n;
  }
  return { model, mean, most };
}

/** What the fibre's variance is without its light, roughly: for weights that know nothing of single columns. */
function fixedVariance({ flux, variance, usable }: Row): number {
  const rest = new Float64Array(flux.length);
  let n = 0;
  for (let x = 0; x < flux.length; x += 3) if (usable[x]) rest[n++] = variance[x] - Math.max(flux[x], 0);
  const all = medianInPlace(rest, n);
  return Number.isNaN(all) ? 1e-3 : Math.max(all, 1e-3);
}

function slopeOf({ m, d, v }: Sums): Pick<FibreFit, "slope" | "chiSquare"> {
  const determinant = m[0] * m[2] - m[1] * m[1];
  const a = (m[2] * d[0] - m[1] * d[1]) / determinant;
  const b = (m[0] * d[1] - m[1] * d[0]) / determinant;
  // χ² = gᵀ S⁻¹ g of the two conditions at a = 1, b = 0.
  const [g0, g1] = [d[0] - m[0], d[1] - m[1]];
  const spread = v[0] * v[2] - v[1] * v[1];
  const chiSquare = (v[2] * g0 * g0 - 2 * v[1] * g0 * g1 + v[0] * g1 * g1) / spread;
  return Number.isFinite(a + b + chiSquare) ? { slope: [a, b], chiSquare } : { slope: [1, 0], chiSquare: 0 };
}

/** By what its fibres say that the frame's scale is wrong; 1 where none tells. */
function commonFactor(own: FrameScale, fits: FibreFit[]): number {
  const telling = fits.filter(({ error }) => error < knownTo);
  if (telling.length === 0) return 1;
  const weights = telling.map(({ error }) => 1 / (error * error + guiding * guiding));
  const factor = weightedMedian(
    telling.map((fit) => fit.factor),
    weights,
  );
  const deviations = telling.map((fit) => Math.abs(fit.factor - factor));
  const noise = median(telling.map(({ error }) => error * error));
  const seen = 1.4826 * median(deviations);
  own.scatter = telling.length < 4 ? Number.NaN : Math.sqrt(Math.max(0, seen * seen - noise)) / Math.max(factor, 0.05);
  const spread = Number.isNaN(own.scatter) ? guiding : own.scatter * factor;
  const total = telling.reduce((sum, { error }) => sum + 1 / (error * error + spread * spread), 0);
  own.from = "light";
  own.error = own.scale * Math.sqrt(1.57 / total);
  return factor;
}

function normalise(scales: FrameScale[]): void {
  const { scale } = scales[0];
  for (const own of scales) own.scale /= scale;
}

/** Factors of single fibres, against the frame's scale, where they are beyond doubt. */
function keepFibres(own: FrameScale, fits: FibreFit[], factor: number): void {
  fits.forEach(({ slope, chiSquare, error }, k) => {
    const [a, b] = [slope[0] / factor, slope[1] / factor];
    if (!(chiSquare > significant) || !(error < knownTo) || !(a - Math.abs(b) > 0.05)) return;
    own.fibre[2 * k] = a;
    own.fibre[2 * k + 1] = b;
  });
}
