/** Poisson numbers, exact for every mean.
 *
 * Below a mean of 10 by sequential inversion of one uniform (Devroye 1986, Non-Uniform Random Variate Generation,
 * chapter X.3), from there on by transformed rejection with squeeze, algorithm PTRS of Hörmann 1993, Insurance:
 * Mathematics and Economics 12, 39. */
import type { Stream } from "./streams.js";

/** A Poisson number of this mean; a mean of 0 or less, or none, gives 0 and takes nothing from the stream.
 * @throws RangeError above 1e12, where rounding in the rejection's logarithms begins to matter. */
export function poisson(stream: Stream, mean: number): number {
  if (mean > 1e12) throw new RangeError(`Poisson mean: found ${mean}, at most 1e12 can be drawn; lower it`);
  if (!(mean > 0)) return 0;
  return mean < 10 ? byInversion(stream, mean) : byTransformedRejection(stream, mean);
}

function byInversion(stream: Stream, mean: number): number {
  let left = stream.uniform();
  let probability = Math.exp(-mean);
  for (let k = 0; ; k++) {
    // The second way out is for a uniform so near 1 that rounding ran past every term; 1e-17 is below its grain of 2⁻⁵³.
    if (left < probability || (k > mean && probability < 1e-17)) return k;
    left -= probability;
    probability *= mean / (k + 1);
  }
}

/** The constants are those of the paper's table for PTRS. */
function byTransformedRejection(stream: Stream, mean: number): number {
  const b = 0.931 + 2.53 * Math.sqrt(mean);
  const a = -0.059 + 0.02483 * b;
  const squeeze = 0.9277 - 3.6224 / (b - 2);
  for (;;) {
    const u = stream.uniform() - 0.5;
    const v = stream.uniform();
    const edge = 0.5 - Math.abs(u);
    const k = Math.floor(((2 * a) / edge + b) * u + mean + 0.43);
    if (edge >= 0.07 && v <= squeeze) return k;
    if (k < 0 || (edge < 0.013 && v > edge)) continue;
    const inverseAlpha = 1.1239 + 1.1328 / (b - 3.4);
    const hat = Math.log((v * inverseAlpha) / (a / (edge * edge) + b));
    if (hat <= k * Math.log(mean) - mean - logFactorial(k)) return k;
  }
}

const SMALL_LOG_FACTORIALS = (() => {
  const table = new Float64Array(16);
  for (let k = 1; k < 16; k++) table[k] = table[k - 1] + Math.log(k);
  return table;
})();

/** ln k!, by Stirling's series (Abramowitz & Stegun 6.1.41) from 16 on, where its first neglected term is below 1e-11. */
export function logFactorial(k: number): number {
  if (k < 16) return SMALL_LOG_FACTORIALS[k];
  const z = k + 1;
  const inverseSquare = 1 / (z * z);
  const series = (1 / 12 - inverseSquare * (1 / 360 - inverseSquare * (1 / 1260 - inverseSquare / 1680))) / z;
  return (z - 0.5) * Math.log(z) - z + 0.5 * Math.log(2 * Math.PI) + series;
}
