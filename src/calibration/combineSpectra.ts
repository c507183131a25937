/** Frames of one field made one: outliers out, every frame scaled to the first one's exposure.
 *
 *     d_i(k, x) = s_i c_ik(x) · μ(k, x) + noise
 *     μ = Σ w_i d_i / Σ w_i s_i c_ik,    w_i = s_i c_ik / v_i
 *
 * with scales from exposureScale.ts, variances v_i from the light that all frames agree on (sharedModel.ts), and outliers judged
 * against them (combinePoint.ts). A frame's own variance never weighs its own value. What a hit leaves beside the pixels that
 * stood out goes with them at half the threshold. */
import { Flag, type Spectra, UNUSABLE } from "../extraction/spectra.js";
import { type AlignedFrame, alignFrames } from "./alignFrames.js";
import { PointStack } from "./combinePoint.js";
import { type FrameScale, fitScales, medianModel } from "./exposureScale.js";
import { requireAlike, requireOneField, stackWarnings } from "./frameAgreement.js";
import { grantedMisfit, sharedVariance, varianceSlope } from "./sharedModel.js";
import type { SpectraProduct } from "./spectraProduct.js";

export interface CombineOptions {
  /** How many predicted σ a value may stray. Default 5. */
  kappa?: number;
  /** Reject outliers. Default true. */
  cosmicRays?: boolean;
  /** Pixels by which wavelengths may differ before light is moved. Default 0.05. */
  tolerance?: number;
  /** Combine frames whose fibres' light does not agree. Default false. */
  trustField?: boolean;
}

/** What a frame brought to the whole. */
export interface FrameShare extends Pick<FrameScale, "scale" | "error" | "from" | "scatter"> {
  name: string;
  exposureSeconds: number;
  /** Share of the information, Σ s²/v, that is this frame's. */
  weight: number;
  /** Of its usable points. */
  rejectedShare: number;
  usableShare: number;
  /** Largest difference of its wavelengths from the first frame's, pixels; NaN without wavelengths. */
  apart: number;
  moved: boolean;
  /** By how much its light lies at higher columns than the first frame's, as the lines in it show, after moving. */
  lineShift: number;
  lineShiftError: number;
}

/** nFibre × nx, e⁻ per column of the first frame's exposure. */
export interface CombinedSpectra {
  spectra: Spectra;
  /** Frames that count at each point. */
  nFrames: Int16Array;
  sky?: Float64Array;
  /** cov(x, x + 1), where light was moved. */
  columnCovariance?: Float64Array;
  frames: FrameShare[];
  warnings: string[];
}

/** @throws CalibrationError for frames that cannot be of one field, or were not made alike. */
export function combineSpectra(products: SpectraProduct[], options: CombineOptions = {}): CombinedSpectra {
  const { kappa = 5, cosmicRays = true, tolerance = 0.05, trustField = false } = options;
  requireAlike(products);
  const frames = alignFrames(products, tolerance);
  const scales = fitScales(frames);
  if (!trustField) requireOneField(frames, scales);
  const stack = new Stack(frames, scales, cosmicRays ? kappa : Number.POSITIVE_INFINITY);
  for (let k = 0; k < stack.nFibre; k++) stack.combineFibre(k);
  const shares = stack.shares();
  const { out: spectra, nFrames, sky, columnCovariance } = stack;
  return {
    ...{ spectra, nFrames, frames: shares, warnings: stackWarnings(products, shares, tolerance) },
    ...(sky ? { sky } : {}),
    ...(columnCovariance ? { columnCovariance } : {}),
  };
}

class Stack {
  readonly nFibre: number;
  readonly nx: number;
  readonly out: Spectra;
  readonly nFrames: Int16Array;
  readonly sky: Float64Array | undefined;
  readonly columnCovariance: Float64Array | undefined;
  private readonly point: PointStack;
  private readonly model: Float64Array;
  private readonly misfit: Float64Array;
  /** [nFrame × nx]: w of the fibre's frames, 0 where they do not count, and of the fibre before. */
  private weights: Float64Array;
  private before: Float64Array;
  /** [nx]: Σ w s. */
  private totals: Float64Array;
  private totalsBefore: Float64Array;
  private readonly rejected: Uint8Array;
  private gamma = 1;
  private readonly tally: { used: number; rejected: number; information: number; shift: number; slope: number }[];

  constructor(
    private readonly frames: AlignedFrame[],
    private readonly scales: FrameScale[],
    private readonly kappa: number,
  ) {
    const { nFibre, nx } = frames[0].spectra;
    [this.nFibre, this.nx] = [nFibre, nx];
    const none = () => new Float64Array(nFibre * nx).fill(Number.NaN);
    this.out = {
      ...frames[0].spectra,
      ...{ flux: none(), variance: none(), neighbourCovariance: none(), chi2: none(), background: none() },
      flags: new Int32Array(nFibre * nx),
    };
    this.nFrames = new Int16Array(nFibre * nx);
    this.sky = frames.every((frame) => frame.sky) ? none() : undefined;
    this.columnCovariance = frames.some(({ moved }) => moved) ? none() : undefined;
    this.point = new PointStack(frames.length);
    const row = () => new Float64Array(nx);
    [this.model, this.misfit, this.totals, this.totalsBefore] = [row(), row(), row(), row()];
    [this.weights, this.before] = [new Float64Array(frames.length * nx), new Float64Array(frames.length * nx)];
    this.rejected = new Uint8Array(frames.length * nx);
    this.tally = frames.map(() => ({ used: 0, rejected: 0, information: 0, shift: 0, slope: 0 }));
  }

  combineFibre(k: number): void {
    [this.weights, this.before] = [this.before, this.weights];
    [this.totals, this.totalsBefore] = [this.totalsBefore, this.totals];
    this.weights.fill(0);
    this.totals.fill(0);
    this.rejected.fill(0);
    medianModel(this.frames, this.scales, k, this.model);
    grantedMisfit(this.model, this.misfit);
    this.gamma = varianceSlope(this.frames, k, this.nx);
    for (let x = 0; x < this.nx; x++) this.firstLook(k, x);
    if (Number.isFinite(this.kappa)) for (let x = 0; x < this.nx; x++) this.grow(k, x);
    for (let x = 0; x < this.nx; x++) this.write(k, x);
    this.covariances(k);
    this.lineShifts(k);
  }

  /** s_i c_ik at column x. */
  private scaleAt(i: number, k: number, x: number): number {
    const { scale, fibre } = this.scales[i];
    const t = (2 * x) / (this.nx - 1) - 1;
    return scale * (fibre[2 * k] + fibre[2 * k + 1] * t);
  }

  /** The frames that have a value there. */
  private gather(k: number, x: number): void {
    const { point } = this;
    const at = k * this.nx + x;
    point.n = 0;
    this.frames.forEach(({ usable, spectra }, i) => {
      if (!usable[at]) return;
      point.frame[point.n] = i;
      point.value[point.n] = spectra.flux[at];
      point.scale[point.n] = this.scaleAt(i, k, x);
      point.n++;
    });
  }

  /** Variances and misfit of the gathered frames for this light. */
  private predict(k: number, x: number, light: number): void {
    const { point } = this;
    const at = k * this.nx + x;
    for (let j = 0; j < point.n; j++) {
      const frame = this.frames[point.frame[j]];
      const s = point.scale[j];
      const shared = sharedVariance(frame, at, s * light, this.gamma);
      point.information[j] = shared;
      point.variance[j] = frame.moved ? (shared * frame.spectra.variance[at]) / frame.information[at] : shared;
      point.misfit[j] = s * s * this.misfit[x];
    }
  }

  private firstLook(k: number, x: number): void {
    const { point } = this;
    this.gather(k, x);
    if (point.n === 0) return;
    this.predict(k, x, this.model[x]);
    point.reject(this.kappa);
    // The median of few frames is coarse: once more with the mean of those that were kept.
    this.predict(k, x, point.mean);
    point.reject(this.kappa);
    for (let j = 0; j < point.n; j++) if (!point.kept[j]) this.rejected[point.frame[j] * this.nx + x] = 1;
    this.model[x] = point.mean;
  }

  /** A hit's skirts: brighter than half the threshold beside a rejected value of the same frame. */
  private grow(k: number, x: number): void {
    const { point, rejected, nx } = this;
    const beside = (i: number) =>
      (x > 0 && rejected[i * nx + x - 1] === 1) || (x + 1 < nx && rejected[i * nx + x + 1] === 1);
    if (!this.frames.some((_, i) => rejected[i * nx + x] === 0 && beside(i))) return;
    this.restore(k, x);
    for (let j = 0; j < point.n; j++) {
      const i = point.frame[j];
      // 2: not a place that others grow from.
      if (point.kept[j] && point.nKept() > 1 && beside(i) && point.deviation(j) > this.kappa / 2)
        rejected[i * nx + x] = 2;
    }
  }

  /** The point as it was left, with the rejections that stand by now. */
  private restore(k: number, x: number): void {
    const { point } = this;
    this.gather(k, x);
    this.predict(k, x, this.model[x]);
    for (let j = 0; j < point.n; j++) point.kept[j] = this.rejected[point.frame[j] * this.nx + x] === 0 ? 1 : 0;
    point.average();
  }

  private write(k: number, x: number): void {
    const { point, out, nx } = this;
    const at = k * nx + x;
    this.restore(k, x);
    let [informative, unusable] = [0, 0];
    for (const { spectra, usable } of this.frames) {
      if (!usable[at]) unusable |= spectra.flags[at] & UNUSABLE || Flag.weightLost;
    }
    if (point.n === 0) {
      out.flags[at] = unusable;
      return;
    }
    let [background, sky] = [0, 0];
    for (let j = 0; j < point.n; j++) {
      const i = point.frame[j];
      const frame = this.frames[i];
      this.tally[i].used++;
      if (!point.kept[j]) {
        this.tally[i].rejected++;
        informative |= Flag.cosmicRay;
        continue;
      }
      const w = point.weight(j);
      this.weights[i * nx + x] = w;
      this.tally[i].information += w * point.scale[j];
      informative |= frame.spectra.flags[at];
      background += w * frame.spectra.background[at];
      if (frame.sky) sky += w * frame.sky[at];
    }
    this.totals[x] = point.total;
    this.model[x] = point.mean;
    this.nFrames[at] = point.nKept();
    out.flux[at] = point.mean;
    out.variance[at] = point.meanVariance;
    out.chi2[at] = point.reducedChiSquare();
    out.background[at] = background / point.total;
    if (this.sky) this.sky[at] = sky / point.total;
    out.flags[at] = informative;
  }

  /** With the fibre before, and, where light was moved, with the next column. */
  private covariances(k: number): void {
    const { frames, weights, before, totals, totalsBefore, nx } = this;
    for (let x = 0; x < nx; x++) {
      const at = k * nx + x;
      if (k > 0 && totals[x] > 0 && totalsBefore[x] > 0) {
        let sum = 0;
        frames.forEach(({ spectra }, i) => {
          const both = weights[i * nx + x] * before[i * nx + x];
          if (both > 0) sum += both * spectra.neighbourCovariance[at - nx];
        });
        this.out.neighbourCovariance[at - nx] = sum / (totals[x] * totalsBefore[x]);
      }
      if (this.columnCovariance === undefined || x + 1 === nx || !(totals[x] > 0 && totals[x + 1] > 0)) continue;
      let sum = 0;
      frames.forEach(({ columnCovariance }, i) => {
        const both = weights[i * nx + x] * weights[i * nx + x + 1];
        if (both > 0 && columnCovariance) sum += both * columnCovariance[at];
      });
      this.columnCovariance[at] = sum / (totals[x] * totals[x + 1]);
    }
  }

  /** How far along the columns each frame's light lies from the mean: d − s μ = −s·δ·dμ/dx. */
  private lineShifts(k: number): void {
    const { frames, model, nx } = this;
    for (let x = 1; x + 1 < nx; x++) {
      const slope = 0.5 * (model[x + 1] - model[x - 1]);
      if (!Number.isFinite(slope)) continue;
      frames.forEach(({ spectra }, i) => {
        const w = this.weights[i * nx + x];
        if (!(w > 0)) return;
        const s = this.scaleAt(i, k, x);
        // w = s/v, and misfit counts as noise of its own.
        const inverse = 1 / (s / w + s * s * this.misfit[x]);
        const off = spectra.flux[k * nx + x] - s * model[x];
        this.tally[i].shift -= inverse * s * slope * off;
        this.tally[i].slope += inverse * s * s * slope * slope;
      });
    }
  }

  shares(): FrameShare[] {
    const total = this.tally.reduce((sum, { information }) => sum + information, 0);
    const shift = (i: number) => this.tally[i].shift / this.tally[i].slope;
    const variance = (i: number) => 1 / this.tally[i].slope;
    return this.frames.map(({ name, exposureSeconds, apart, moved }, i) => {
      const { scale, error, from, scatter } = this.scales[i];
      const { used, rejected, information } = this.tally[i];
      return {
        ...{ name, exposureSeconds, scale, error, from, scatter, apart, moved },
        weight: information / total,
        rejectedShare: used > 0 ? rejected / used : 0,
        usableShare: used / (this.nFibre * this.nx),
        lineShift: i === 0 ? 0 : shift(i) - shift(0),
        lineShiftError: i === 0 ? 0 : Math.sqrt(variance(i) + variance(0)),
      };
    });
  }
}
