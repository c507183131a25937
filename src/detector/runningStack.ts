/** A stack of any number of frames that never holds more than one of them: values are compared with a centre that is known
 * beforehand, from some of the frames, against all the noise in their difference, and those within reach are summed.
 *
 *     |value_i − scale_i · c| ≤ κ·√(σ_i² + scale_i²·var(c)),   σ_i² = readVariance_i + max(scale_i · c, 0)        electrons
 *     mean  = Σ value_i / Σ scale_i,   variance = [Σ readVariance_i + max(Σ value_i, 0)] / (Σ scale_i)²
 *
 * A good value lies out of reach once in 1/(1 − erf(κ/√2)) times: 1.7 million at κ = 5. Of a frame that helped to make the
 * centre the difference is smaller than said, so that it is clipped a little later. */
import type { Stack, StackFrame } from "./combine.js";

export class RunningStack {
  readonly clippedShare: number[] = [];
  private readonly sumValue: Float64Array;
  private readonly sumScale: Float64Array;
  private readonly sumRead: Float64Array;

  /** @param centre a stack of some of the frames; pixels without a value take the first that comes.
   * @param photons as for `combineFrames`. */
  constructor(
    private readonly centre: Stack,
    private readonly nx: number,
    private readonly photons: boolean,
    private readonly kappa = 5,
  ) {
    const n = centre.mean.length;
    this.sumValue = new Float64Array(n);
    this.sumScale = new Float64Array(n);
    this.sumRead = new Float64Array(n);
  }

  add({ electrons, mask, regions, scale }: StackFrame): void {
    const { centre, nx, sumValue, sumScale, sumRead } = this;
    const kappa2 = this.kappa * this.kappa;
    let nClipped = 0;
    let nPixel = 0;
    for (const { x0, x1, y0, y1, readVariance } of regions) {
      nPixel += (x1 - x0) * (y1 - y0);
      for (let y = y0; y < y1; y++) {
        for (let at = y * nx + x0; at < y * nx + x1; at++) {
          const value = electrons[at];
          // Of NaN and ±Infinity this difference is NaN.
          if (mask[at] !== 0 || value - value !== 0) continue;
          const expected = scale * centre.mean[at];
          const off = value - expected;
          const sigma2 = readVariance + this.shot(expected) + scale * scale * centre.variance[at];
          if (off * off > kappa2 * sigma2) {
            nClipped++;
            continue;
          }
          if (Number.isNaN(off)) this.takeAsCentre(at, value, scale, readVariance);
          sumValue[at] += value;
          sumScale[at] += scale;
          sumRead[at] += readVariance;
        }
      }
    }
    this.clippedShare.push(nClipped / nPixel);
  }

  /** The stack; the centre's arrays are taken for it. Where nothing was within reach the centre stays. */
  finish(): Stack {
    const { mean, variance } = this.centre;
    for (let at = 0; at < mean.length; at++) {
      const scale = this.sumScale[at];
      if (scale === 0) continue;
      mean[at] = this.sumValue[at] / scale;
      variance[at] = (this.sumRead[at] + this.shot(this.sumValue[at])) / (scale * scale);
    }
    return { mean, variance, clippedShare: this.clippedShare };
  }

  private shot(electrons: number): number {
    return this.photons ? Math.max(electrons, 0) : 0;
  }

  private takeAsCentre(at: number, value: number, scale: number, readVariance: number): void {
    this.centre.mean[at] = value / scale;
    this.centre.variance[at] = (readVariance + this.shot(value)) / (scale * scale);
  }
}
