/** The noise that a stack predicts for each of its frames, from the light that all of them agree on.
 *
 * A frame's own variance follows its own noise: where it scattered upwards there seem to be more photons. Weights made of it
 * favour what scattered down (at 10 e⁻ on a read noise of 5 e⁻ the mean of many frames comes out 1 e⁻ low, however many they
 * are). So each variance is moved to where the shared light would have it,
 *
 *     v_i = V_i + γ·(max(e_i, 0) − max(d_i, 0)),     e_i = s_i μ + sky, d_i with its sky too
 *
 * γ, the variance that an electron of the fibre's light brings, is 1 where photons rule, 4π/(2π√3) = 1.155 for a faint Gaussian
 * weighted by its profile, and 1/t of that for spectra that were divided by a throughput t. It is measured on the frames themselves,
 * as the slope of V against the light between next columns, where all else that V hangs on is the same. */
import { weightedMedian } from "../reference/median.js";
import type { AlignedFrame } from "./alignFrames.js";

/** Frames may differ by this share of the light beyond noise: seeing, guiding, throughput. */
const lightMisfit = 0.01;
/** And by this share of the range of the light within two columns: lines that differ a little in place or width. */
const lineMisfit = 0.05;
/** A variance is never brought below this share of what the frame says. */
const leastShare = 0.1;

/** Pairs of columns that a slope is made of, at most. */
const mostPairs = 3000;

/** γ of a fibre: the median of ΔV/Δf between next columns, weighted by |Δf|/V, over all frames; 1 where there are few. */
export function varianceSlope(frames: AlignedFrame[], k: number, nx: number): number {
  const step = Math.max(1, Math.ceil((frames.length * nx) / mostPairs));
  const [slopes, weights]: [number[], number[]] = [[], []];
  frames.forEach(({ spectra, usable, information, sky }, i) => {
    for (let x = i % step; x + 1 < nx; x += step) {
      const at = k * nx + x;
      if (!usable[at] || !usable[at + 1]) continue;
      const [a, b] = [spectra.flux[at] + (sky?.[at] ?? 0), spectra.flux[at + 1] + (sky?.[at + 1] ?? 0)];
      // Below 0 variances follow nothing any more.
      if (!(a > 0) || !(b > 0) || a === b) continue;
      slopes.push((information[at + 1] - information[at]) / (b - a));
      weights.push(Math.abs(b - a) / (information[at] + information[at + 1]));
    }
  });
  if (slopes.length < 30) return 1;
  return Math.max(0, weightedMedian(slopes, weights));
}

/** v_i of one point. `expected`: s_i μ, e⁻. */
export function sharedVariance(
  { spectra, information, sky }: AlignedFrame,
  at: number,
  expected: number,
  gamma: number,
): number {
  const ofSky = sky?.[at] ?? 0;
  const moved = Math.max(expected + ofSky, 0) - Math.max(spectra.flux[at] + ofSky, 0);
  return Math.max(information[at] + gamma * moved, leastShare * information[at]);
}

/** Squared misfit that is granted at each column, for a scale of 1: [nx]. `model`: e⁻. */
export function grantedMisfit(model: Float64Array, misfit: Float64Array): void {
  const nx = model.length;
  for (let x = 0; x < nx; x++) {
    let [low, high] = [Number.POSITIVE_INFINITY, Number.NEGATIVE_INFINITY];
    for (let j = Math.max(0, x - 2); j <= Math.min(nx - 1, x + 2); j++) {
      if (model[j] < low) low = model[j];
      if (model[j] > high) high = model[j];
    }
    const light = Number.isNaN(model[x]) ? 0 : lightMisfit * model[x];
    const range = high > low ? lineMisfit * (high - low) : 0;
    misfit[x] = light * light + range * range;
  }
}
