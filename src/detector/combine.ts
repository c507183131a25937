/** Several frames of one kind made one: outliers clipped around the median against the noise that read noise and gain
 * predict, never against the sample's own scatter (with n frames no value can lie more than (n−1)/√n of the sample's σ
 * from its mean, so that three frames would never reject at 3 σ).
 *
 *     value_i = scale_i · μ + noise,   σ_i² = readVariance_i + max(scale_i · μ, 0)        electrons
 *     mean  = Σ value_i / Σ scale_i,   variance = Σ σ_i² / (Σ scale_i)²                   over the frames kept */
import type { Region } from "./assemble.js";

export interface StackFrame {
  /** ny × nx, e⁻; NaN where there is no value. */
  electrons: Float32Array;
  /** ny × nx: any bit keeps the pixel out. */
  mask: Uint8Array;
  regions: Pick<Region, "x0" | "x1" | "y0" | "y1" | "readVariance">[];
  /** How much of μ this frame holds: 1 for bias, seconds for dark, the level for flats. */
  scale: number;
}

export interface Stack {
  /** ny × nx, electrons per unit of scale; NaN where no frame has a value. */
  mean: Float32Array;
  variance: Float32Array;
  /** Share of its pixels that was clipped, one a frame. */
  clippedShare: number[];
}

/** @param photons whether the level brings Poisson noise of its own; bias structure does not.
 * @param kappa how many predicted σ a value may stray. One frame is taken as it is; of two that disagree the lower
 * is kept, since cosmic rays only add. */
export function combineFrames(frames: StackFrame[], nx: number, ny: number, photons: boolean, kappa = 5): Stack {
  const mean = new Float32Array(nx * ny).fill(Number.NaN);
  const variance = new Float32Array(nx * ny).fill(Number.NaN);
  const clipped = new Float64Array(frames.length);
  const pixel = new PixelStack(frames.length, photons, kappa);
  let nPixel = 0;
  const electrons = frames.map((frame) => frame.electrons);
  const masks = frames.map((frame) => frame.mask);
  const scales = Float64Array.from(frames, ({ scale }) => scale);
  frames[0].regions.forEach((region, k) => {
    const readVariances = Float64Array.from(frames, ({ regions }) => regions[k].readVariance);
    for (let y = region.y0; y < region.y1; y++) {
      for (let at = y * nx + region.x0; at < y * nx + region.x1; at++) {
        nPixel++;
        pixel.clear();
        for (let i = 0; i < frames.length; i++) {
          const value = electrons[i][at];
          if (masks[i][at] === 0 && Number.isFinite(value)) pixel.add(i, value, scales[i], readVariances[i]);
        }
        if (pixel.n === 0) continue;
        pixel.combine(clipped);
        mean[at] = pixel.mean;
        variance[at] = pixel.variance;
      }
    }
  });
  return { mean, variance, clippedShare: Array.from(clipped, (count) => count / nPixel) };
}

/** The values of one pixel; kept between pixels so that nothing is allocated in the loop. */
class PixelStack {
  n = 0;
  mean = Number.NaN;
  variance = Number.NaN;
  private readonly frame: Int32Array;
  private readonly value: Float64Array;
  private readonly scale: Float64Array;
  private readonly readVariance: Float64Array;
  private readonly ratio: Float64Array;

  constructor(
    most: number,
    private readonly photons: boolean,
    private readonly kappa: number,
  ) {
    this.frame = new Int32Array(most);
    this.value = new Float64Array(most);
    this.scale = new Float64Array(most);
    this.readVariance = new Float64Array(most);
    this.ratio = new Float64Array(most);
  }

  clear(): void {
    this.n = 0;
  }

  add(frame: number, value: number, scale: number, readVariance: number): void {
    this.frame[this.n] = frame;
    this.value[this.n] = value;
    this.scale[this.n] = scale;
    this.readVariance[this.n] = readVariance;
    this.ratio[this.n] = value / scale;
    this.n++;
  }

  combine(clipped: Float64Array): void {
    const centre = this.centre();
    let sumValue = 0;
    let sumScale = 0;
    let sumRead = 0;
    for (let i = 0; i < this.n; i++) {
      const expected = this.scale[i] * centre;
      const sigma2 = this.readVariance[i] + this.shot(expected);
      // Of two frames the centre is one of them: their difference has both their noises.
      const reach2 = this.kappa * this.kappa * sigma2 * (this.n === 2 ? 2 : 1);
      if (this.n > 1 && (this.value[i] - expected) ** 2 > reach2) {
        clipped[this.frame[i]]++;
        continue;
      }
      sumValue += this.value[i];
      sumScale += this.scale[i];
      sumRead += this.readVariance[i];
    }
    // The median itself is always within reach when n is odd; between two middle values far apart nobody may be.
    if (sumScale === 0) {
      this.takeLowest();
      return;
    }
    this.mean = sumValue / sumScale;
    this.variance = (sumRead + this.shot(this.mean * sumScale)) / (sumScale * sumScale);
  }

  private shot(electrons: number): number {
    return this.photons ? Math.max(electrons, 0) : 0;
  }

  /** Median of value ÷ scale; the lower of two. */
  private centre(): number {
    const sorted = this.ratio;
    sortFirst(sorted, this.n);
    if (this.n === 2) return sorted[0];
    const middle = this.n >> 1;
    return this.n % 2 === 1 ? sorted[middle] : (sorted[middle - 1] + sorted[middle]) / 2;
  }

  private takeLowest(): void {
    let best = 0;
    for (let i = 1; i < this.n; i++) {
      if (this.value[i] / this.scale[i] < this.value[best] / this.scale[best]) best = i;
    }
    this.mean = this.value[best] / this.scale[best];
    this.variance = (this.readVariance[best] + this.shot(this.value[best])) / this.scale[best] ** 2;
  }
}

/** Insertion sort of the first n: a stack is a few frames, and a library sort would allocate for every pixel. */
function sortFirst(values: Float64Array, n: number): void {
  for (let i = 1; i < n; i++) {
    const value = values[i];
    let at = i;
    for (; at > 0 && values[at - 1] > value; at--) values[at] = values[at - 1];
    values[at] = value;
  }
}
