/** Door to assembly/profile.ts. */
import type { Kernels, Workbench } from "./module.js";

const largestWindow = 256;
const benches = new WeakMap<Kernels, { bench: Workbench; weights: Float64Array }>();

/** Light of a Gaussian of unit integral on pixels `first` … `first + n − 1`; centre and σ in pixels. [n]
 * @throws RangeError when n is not from 1 to 256, or σ is not positive. */
export function gaussianWeights(
  kernels: Kernels,
  centre: number,
  sigma: number,
  first: number,
  n: number,
): Float64Array {
  if (!(n >= 1 && n <= largestWindow))
    throw new RangeError(`A window of ${n} pixels; 1 to ${largestWindow} are possible.`);
  if (!(sigma > 0)) throw new RangeError(`A profile's σ of ${sigma} pixels; it must be positive.`);
  let kept = benches.get(kernels);
  if (kept === undefined) {
    const bench = kernels.workbench(8 * largestWindow, 1);
    kept = { bench, weights: bench.float64(largestWindow) };
    benches.set(kernels, kept);
  }
  kept.bench.call.gaussianWeights64(centre, sigma, first, n, kept.weights.byteOffset);
  return kept.weights.slice(0, n);
}
