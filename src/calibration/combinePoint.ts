/** One point of a stack: which frames are outliers there, and the mean of the others.
 *
 *     d_i = s_i μ + noise_i,   σ_i² = v_i + misfit_i²
 *     μ = Σ w_i d_i / Σ w_i s_i,   w_i = s_i / u_i,   var μ = Σ w_i² v_i / (Σ w_i s_i)²
 *
 * with v_i and u_i from the shared model, which no frame's own noise has moved. Outliers are judged against the noise that this
 * predicts, never against the scatter of the sample: of three frames none can lie more than (3 − 1)/√3 of the
 * sample's σ from its mean. First against the median; then each against the mean of the others, the worst going first. When no
 * majority agrees, the lowest and those that agree with it are kept, since hits only add light. */

import { medianInPlace } from "../reference/median.js";

export class PointStack {
  n = 0;
  readonly frame: Int32Array;
  readonly value: Float64Array;
  readonly scale: Float64Array;
  /** Its noise at the shared model. */
  readonly variance: Float64Array;
  /** What its weight goes by. */
  readonly information: Float64Array;
  /** Square of what frames may differ by beyond noise. */
  readonly misfit: Float64Array;
  readonly kept: Uint8Array;
  private readonly ratio: Float64Array;
  mean = Number.NaN;
  meanVariance = Number.NaN;
  /** Σ w s, Σ w d and Σ w² v over those that are kept. */
  total = 0;
  private sum = 0;
  private noise = 0;

  constructor(most: number) {
    this.frame = new Int32Array(most);
    this.kept = new Uint8Array(most);
    const numbers = () => new Float64Array(most);
    [this.value, this.scale, this.variance] = [numbers(), numbers(), numbers()];
    [this.information, this.misfit, this.ratio] = [numbers(), numbers(), numbers()];
  }

  /** w_i. */
  weight(i: number): number {
    return this.scale[i] / this.information[i];
  }

  /** Marks outliers beyond `kappa`·σ and takes the mean of the others; `kappa` infinite keeps all. */
  reject(kappa: number): void {
    this.kept.fill(1, 0, this.n);
    if (this.n > 1 && Number.isFinite(kappa)) {
      if (this.n === 2) this.rejectOfTwo(kappa);
      else {
        this.keepNear(this.centre(), kappa, Math.PI / 2);
        if (2 * this.nKept() <= this.n) this.keepNear(this.lowest(), kappa, this.n);
        this.average();
        while (this.rejectWorst(kappa));
      }
    }
    this.average();
  }

  average(): void {
    this.sum = 0;
    this.noise = 0;
    this.total = 0;
    for (let i = 0; i < this.n; i++) if (this.kept[i]) this.count(i, 1);
    const { sum, noise, total } = this;
    this.mean = total > 0 ? sum / total : Number.NaN;
    this.meanVariance = total > 0 ? noise / (total * total) : Number.NaN;
  }

  /** @param sign 1 to add it to the sums, −1 to take it out. */
  private count(i: number, sign: number): void {
    const w = this.weight(i);
    this.sum += sign * w * this.value[i];
    this.total += sign * w * this.scale[i];
    this.noise += sign * w * w * this.variance[i];
  }

  nKept(): number {
    let n = 0;
    for (let i = 0; i < this.n; i++) n += this.kept[i];
    return n;
  }

  /** Σ (d − s μ)²/σ² over those kept, over their number less one; NaN for one alone. */
  reducedChiSquare(): number {
    let [sum, n] = [0, 0];
    for (let i = 0; i < this.n; i++) {
      if (!this.kept[i]) continue;
      const off = this.value[i] - this.scale[i] * this.mean;
      sum += (off * off) / this.variance[i];
      n++;
    }
    return n > 1 ? sum / (n - 1) : Number.NaN;
  }

  /** (d − s μ′)/σ of one frame against the mean of the others that are kept, whose noise counts too. After `average`. */
  deviation(i: number): number {
    const w = this.kept[i] ? this.weight(i) : 0;
    const s = this.scale[i];
    const total = this.total - w * s;
    if (!(total > 0)) return 0;
    const off = this.value[i] - (s * (this.sum - w * this.value[i])) / total;
    const others = (s * s * (this.noise - w * w * this.variance[i])) / (total * total);
    return off / Math.sqrt(this.variance[i] + this.misfit[i] + others);
  }

  private rejectOfTwo(kappa: number): void {
    const [a, b] = [this.value[0] / this.scale[0], this.value[1] / this.scale[1]];
    let noise = 0;
    for (let i = 0; i < 2; i++) noise += (this.variance[i] + this.misfit[i]) / (this.scale[i] * this.scale[i]);
    if ((a - b) * (a - b) > kappa * kappa * noise) this.kept[a > b ? 0 : 1] = 0;
  }

  /** @param share variance of the centre over that of the mean of all. */
  private keepNear(centre: number, kappa: number, share: number): void {
    let information = 0;
    for (let i = 0; i < this.n; i++) information += (this.scale[i] * this.scale[i]) / this.variance[i];
    for (let i = 0; i < this.n; i++) {
      const off = this.value[i] - this.scale[i] * centre;
      const noise = this.variance[i] + this.misfit[i] + (this.scale[i] * this.scale[i] * share) / information;
      this.kept[i] = off * off > kappa * kappa * noise ? 0 : 1;
    }
  }

  private rejectWorst(kappa: number): boolean {
    if (this.nKept() < 3) return false;
    let [worst, most] = [-1, kappa];
    for (let i = 0; i < this.n; i++) {
      const off = this.kept[i] ? Math.abs(this.deviation(i)) : 0;
      if (off > most) [worst, most] = [i, off];
    }
    if (worst < 0) return false;
    this.kept[worst] = 0;
    this.average();
    return true;
  }

  /** Median of value over scale. */
  private centre(): number {
    for (let i = 0; i < this.n; i++) this.ratio[i] = this.value[i] / this.scale[i];
    return medianInPlace(this.ratio, this.n);
  }

  private lowest(): number {
    let least = Number.POSITIVE_INFINITY;
    for (let i = 0; i < this.n; i++) least = Math.min(least, this.value[i] / this.scale[i]);
    return least;
  }
}
