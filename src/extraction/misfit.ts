/** How well the profiles fit this very frame: ε, the share of the light nearby by which pixels miss the model beyond noise.
 *
 * A shift since the flat or a profile that is not quite the model's leaves excesses that follow the light; cosmic rays are
 * far rarer than one pixel in five hundred. So ε is taken such that κ·ε covers all but those few of the excesses, and
 * half as much again. With a bad profile ε is large and only strong hits are found; that is the price of keeping lines. */
import type { ExtractionBench, GroupRows } from "../kernels/extraction.js";
import { select } from "../reference/median.js";

/** Groups of columns looked at: at the most, at the least, and rows of the frame that they hold together between those. */
const mostGroups = 32;
const leastGroups = 8;
const enoughRows = 32_768;
/** Only pixels whose noise is below this share of the light nearby can tell. */
const tellingNoise = 0.02;
const quantile = 0.998;
const margin = 1.5;

/** ε of the frame of nx columns and ny rows that `bench` holds, at least `floor`. `kappa`: threshold that the excesses must stay
 * below, σ. */
export function measureMisfit(
  bench: Pick<ExtractionBench, "inspect">,
  nx: number,
  blockColumns: number,
  kappa: number,
  floor: number,
  ny = 1,
): number {
  const nBlock = Math.floor(nx / blockColumns);
  const nGroup = Math.max(leastGroups, Math.min(mostGroups, Math.ceil(enoughRows / ny)));
  const step = Math.max(1, Math.floor(nBlock / nGroup));
  const excesses: number[] = [];
  for (let block = step >> 1; block < nBlock; block += step) {
    collectExcesses(bench.inspect(block * blockColumns), kappa, excesses);
  }
  const n = excesses.length;
  if (n < 100) return floor;
  const worst = select(Float64Array.from(excesses), n, Math.floor(quantile * (n - 1)));
  return Math.max(floor, (margin * worst) / kappa);
}

function collectExcesses(rows: GroupRows, kappa: number, excesses: number[]): void {
  const { light, model, reach, inverseVariance, nLane, nColumn } = rows;
  for (let i = 0; i < light.length; i++) {
    if (i % nLane >= nColumn || !(inverseVariance[i] > 0)) continue;
    const sigma = 1 / Math.sqrt(inverseVariance[i]);
    if (sigma < tellingNoise * reach[i]) excesses.push(excessShare(light[i] - model[i], kappa * sigma, reach[i]));
  }
}

/** What is left of an excess, as a share of the light nearby, when noise at the threshold is taken off in quadrature. */
function excessShare(excess: number, noise: number, reach: number): number {
  return excess > noise ? Math.sqrt(excess * excess - noise * noise) / reach : 0;
}
