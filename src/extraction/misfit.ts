/** How well the profiles fit this very frame: ε, the share of the light nearby by which pixels miss the model beyond noise.
 *
 * A shift since the flat or a profile that is not quite the model's leaves excesses that follow the light; cosmic rays are
 * far rarer than one pixel in five hundred. So ε is taken such that κ·ε covers all but those few of the excesses, and
 * half as much again. With a bad profile ε is large and only strong hits are found; that is the price of keeping lines. */
import type { ExtractionBench } from "../kernels/extraction.js";

/** Groups of columns looked at. */
const nGroup = 32;
/** Only pixels whose noise is below this share of the light nearby can tell. */
const tellingNoise = 0.02;
const quantile = 0.998;
const margin = 1.5;

/** ε of the frame that `bench` holds, at least `floor`. `kappa`: threshold that the excesses must stay below, σ. */
export function measureMisfit(
  bench: Pick<ExtractionBench, "inspect">,
  nx: number,
  blockColumns: number,
  kappa: number,
  floor: number,
): number {
  const nBlock = Math.floor(nx / blockColumns);
  const step = Math.max(1, Math.floor(nBlock / nGroup));
  const excesses: number[] = [];
  for (let block = step >> 1; block < nBlock; block += step) {
    const rows = bench.inspect(block * blockColumns);
    for (let i = 0; i < rows.light.length; i++) {
      const [inverseVariance, reach] = [rows.inverseVariance[i], rows.reach[i]];
      if (i % rows.nLane >= rows.nColumn || !(inverseVariance > 0)) continue;
      const sigma = 1 / Math.sqrt(inverseVariance);
      if (sigma < tellingNoise * reach) excesses.push(excessShare(rows.light[i] - rows.model[i], kappa * sigma, reach));
    }
  }
  if (excesses.length < 100) return floor;
  const sorted = Float64Array.from(excesses).sort();
  return Math.max(floor, (margin * sorted[Math.floor(quantile * (sorted.length - 1))]) / kappa);
}

/** What is left of an excess, as a share of the light nearby, when noise at the threshold is taken off in quadrature. */
function excessShare(excess: number, noise: number, reach: number): number {
  return excess > noise ? Math.sqrt(excess * excess - noise * noise) / reach : 0;
}
