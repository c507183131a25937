/** Several measurements of the same fibres' throughput made into one. */
import { medianOf, SIGMA_PER_MAD } from "../detector/clip.js";
import type { Throughput } from "./throughput.js";
import { fibreLevels } from "./throughputFile.js";

/** Mean with inverse variances as weights; these come from models and are smooth in x, so that no single count tips them. */
export function combineThroughputs(all: Throughput[]): Throughput {
  const [first] = all;
  const relative = new Float32Array(first.relative.length);
  const variance = new Float32Array(first.relative.length);
  for (let i = 0; i < relative.length; i++) {
    let [sum, weight] = [0, 0];
    for (const one of all) {
      if (!(one.variance[i] > 0)) continue;
      sum += one.relative[i] / one.variance[i];
      weight += 1 / one.variance[i];
    }
    relative[i] = weight > 0 ? sum / weight : Number.NaN;
    variance[i] = weight > 0 ? 1 / weight : Number.NaN;
  }
  return { ...first, relative, variance };
}

/** How far a frame's levels lie from those of all frames: robust standard deviation over the fibres, relative. Flats lit from
 * elsewhere, or twilight with a gradient, differ by more than the noise. */
export function levelScatter(one: Throughput, all: Throughput): number {
  const [own, common] = [fibreLevels(one), fibreLevels(all)];
  return SIGMA_PER_MAD * medianOf(own.map((level, k) => Math.abs(level / common[k] - 1)));
}

/** The shape along x of one, the fibres' levels of the other: a lamp gives the shape without lines in it, the sky lights the fibres
 * as the sky does. */
export function withLevels(shape: Throughput, levels: Throughput): Throughput {
  const { nFibre, nx } = shape;
  const relative = new Float32Array(shape.relative);
  const variance = new Float32Array(shape.variance);
  for (let k = 0; k < nFibre; k++) {
    const { ratio, error2 } = meanRatio(shape, levels, k);
    for (let i = k * nx; i < (k + 1) * nx; i++) {
      variance[i] = ratio * ratio * variance[i] + error2 * relative[i] * relative[i];
      relative[i] *= ratio;
    }
  }
  return { ...shape, relative, variance };
}

/** Of levels to shape over the fibre, with its variance. The levels' errors go on along the fibre over some knots of the spline:
 * their mean variance, over the four that it has at least. */
function meanRatio(shape: Throughput, levels: Throughput, k: number): { ratio: number; error2: number } {
  const { nx } = shape;
  let [sum, sumVariance, n] = [0, 0, 0];
  for (let i = k * nx; i < (k + 1) * nx; i++) {
    const ratio = levels.relative[i] / shape.relative[i];
    if (!Number.isFinite(ratio)) continue;
    sum += ratio;
    sumVariance += levels.variance[i] / shape.relative[i] ** 2;
    n++;
  }
  return { ratio: sum / n, error2: sumVariance / n / 4 };
}
