/** Robust numbers from many samples: medians, percentiles, and a scatter that a few wild samples cannot move. */
import { select } from "../reference/median.js";

/** Samples beyond this many σ take no part in `clippedScatter`. */
const KAPPA = 4;
/** Variance of a unit Gaussian cut at ±4: 1 − 2·4·φ(4) / erf(4/√2), φ the normal density. */
const CUT_VARIANCE = 0.998929;
/** A Gaussian's σ over its median absolute deviation. */
export const SIGMA_PER_MAD = 1.482602218505602;

/** Finite values, sorted. */
export function sortedFinite(values: ArrayLike<number>): Float64Array {
  return finite(values).sort();
}

/** Finite values, in their order. */
export function finite(values: ArrayLike<number>): Float64Array {
  const kept = new Float64Array(values.length);
  let n = 0;
  for (let i = 0; i < values.length; i++) {
    const value = values[i];
    // Of NaN and ±Infinity this difference is NaN.
    if (value - value === 0) kept[n++] = value;
  }
  return kept.subarray(0, n);
}

/** The q-quantile, q ∈ [0, 1], of sorted values, linear between neighbours; NaN when there are none. */
export function quantileOfSorted(sorted: ArrayLike<number>, q: number): number {
  if (sorted.length === 0) return Number.NaN;
  const at = q * (sorted.length - 1);
  const low = Math.floor(at);
  const high = Math.min(low + 1, sorted.length - 1);
  return sorted[low] + (at - low) * (sorted[high] - sorted[low]);
}

/** Median of the finite values; NaN when there are none. */
export function medianOf(values: ArrayLike<number>): number {
  return quantileInPlace(finite(values), 0.5);
}

/** What `quantileOfSorted` gives of the sorted values, by selection: `values`, all finite, lose their order. */
export function quantileInPlace(values: Float64Array, q: number, n = values.length): number {
  if (n === 0) return Number.NaN;
  const at = q * (n - 1);
  const low = Math.floor(at);
  const below = select(values, n, low);
  if (low + 1 >= n) return below;
  let above = values[low + 1];
  for (let i = low + 2; i < n; i++) if (values[i] < above) above = values[i];
  return below + (at - low) * (above - below);
}

/** Every k-th value, so that at most about `most` are left: enough for a median of a large image. */
export function thinned(values: Float32Array | Float64Array, most = 200_000): Float64Array {
  // An odd step that no usual image width is a multiple of, so that columns are sampled alike.
  let step = Math.max(1, Math.ceil(values.length / most));
  if (step > 1 && step % 2 === 0) step++;
  const out = new Float64Array(Math.ceil(values.length / step));
  for (let i = 0; i < out.length; i++) out[i] = values[i * step];
  return out;
}

export interface Scatter {
  mean: number;
  sigma: number;
  /** Samples kept. */
  n: number;
}

/** Mean and standard deviation of a Gaussian core: root mean square of what lies within 4 σ, iterated from the median
 * absolute deviation and corrected for the cut. Quantised samples are treated right once σ exceeds about 0.5 steps,
 * since the root mean square, not the median deviation, is what converges. NaN without finite samples. */
export function clippedScatter(values: ArrayLike<number>): Scatter {
  return clippedScatterInPlace(finite(values));
}

/** The same of `samples`, all finite, which lose their order. */
export function clippedScatterInPlace(samples: Float64Array): Scatter {
  let mean = quantileInPlace(samples, 0.5);
  const deviations = new Float64Array(samples.length);
  for (let i = 0; i < samples.length; i++) deviations[i] = Math.abs(samples[i] - mean);
  let sigma = SIGMA_PER_MAD * quantileInPlace(deviations, 0.5);
  // Where over half of the samples share one value the median deviation is 0: start from a wide quantile instead.
  if (sigma === 0) sigma = quantileInPlace(deviations, 0.95);
  let n = samples.length;
  for (let turn = 0; turn < 30; turn++) {
    const kept = momentsWithin(samples, mean, KAPPA * sigma);
    const next = Math.sqrt(kept.variance / CUT_VARIANCE);
    const settled = kept.n === n && Math.abs(next - sigma) <= 1e-9 * sigma;
    mean = kept.mean;
    sigma = next;
    n = kept.n;
    if (settled) break;
  }
  return { mean, sigma, n };
}

function momentsWithin(samples: Float64Array, centre: number, reach: number) {
  let n = 0;
  let sum = 0;
  let sum2 = 0;
  for (let i = 0; i < samples.length; i++) {
    const off = samples[i] - centre;
    if (Math.abs(off) > reach) continue;
    n++;
    sum += off;
    sum2 += off * off;
  }
  const mean = n > 0 ? sum / n : Number.NaN;
  const variance = n > 1 ? Math.max(0, (sum2 - n * mean * mean) / (n - 1)) : n === 1 ? 0 : Number.NaN;
  return { n, mean: centre + mean, variance };
}
