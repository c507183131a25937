/** Unresolved lines on a pixelated spectrum: a few Gaussians of one width on a straight continuum,
 *
 *     m_j = a + b·(j − m) + Σ_i A_i [Φ((j + ½ − x_i)/σ) − Φ((j − ½ − x_i)/σ)],   m the middle of the stretch
 *
 * integrated over the pixels, put through the data by Gauss's and Newton's least squares, steps halved while they make
 * the fit worse (Bevington & Robinson, Data Reduction and Error Analysis, chapter 8). Errors from the inverse of the normal
 * equations: those of a correct model and correct variances. */
import { NormalEquations } from "./leastSquares.js";
import { normalCumulative, normalDensity } from "./normalTable.js";

export const FWHM_PER_SIGMA = 2.3548200450309493; // 2 √(2 ln 2)

export interface LineFit {
  /** Columns; their standard errors. */
  x: Float64Array;
  error: Float64Array;
  /** e⁻ of each line; their standard errors. */
  electrons: Float64Array;
  electronsError: Float64Array;
  /** Of all lines of the stretch, columns. */
  sigma: number;
  sigmaError: number;
  chiSquare: number;
  /** Points less unknowns; a width known beforehand is none. */
  freedom: number;
  /** Σ (light of the lines)²/variance, the square of their S/N together. */
  lightSquare: number;
  converged: boolean;
}

const maxSteps = 20;
/** A step below this share of its standard error is the last, and one below this many columns. */
const smallStep = 0.01;
const smallPixels = 1e-6;
/** No step is longer than this many σ. */
const longestStep = 0.7;

/** Fits `start.length` lines on the points flux[from … to − 1], those with a finite variance over 0. `prior`: what is
 * known of σ beforehand. Null when the points are too few or the fit runs away. */
export function fitLines(
  flux: ArrayLike<number>,
  variance: ArrayLike<number>,
  from: number,
  to: number,
  start: ArrayLike<number>,
  sigma: number,
  prior?: { sigma: number; error: number },
): LineFit | null {
  const stretch = new Stretch(flux, variance, from, to, start.length);
  const freedom = stretch.nPoint - stretch.n + (prior === undefined ? 0 : 1);
  if (freedom < 1) return null;
  return stretch.fit(start, sigma, prior, freedom);
}

/** Unknowns: A_i, x_i of each line in turn, then σ, a, b. */
class Stretch {
  readonly n: number;
  nPoint = 0;
  private readonly normal: NormalEquations;
  private readonly index: Int32Array;
  private readonly row: Float64Array;
  /** Of the edges of the pixels, [nLine × (points + 1)]: Φ, and φ. */
  private readonly cumulative: Float64Array;
  private readonly density: Float64Array;
  private lightSquare = 0;

  constructor(
    private readonly flux: ArrayLike<number>,
    private readonly variance: ArrayLike<number>,
    private readonly from: number,
    private readonly to: number,
    private readonly nLine: number,
  ) {
    this.n = 2 * nLine + 3;
    this.normal = new NormalEquations(this.n);
    this.index = Int32Array.from({ length: this.n }, (_, i) => i);
    this.row = new Float64Array(this.n);
    this.cumulative = new Float64Array(nLine * (to - from + 1));
    this.density = new Float64Array(nLine * (to - from + 1));
    for (let j = from; j < to; j++) if (this.good(j)) this.nPoint++;
  }

  fit(
    start: ArrayLike<number>,
    sigma: number,
    prior: { sigma: number; error: number } | undefined,
    freedom: number,
  ): LineFit | null {
    const { n, nLine } = this;
    let here: Float64Array = Float64Array.from({ length: n }, (_, i) =>
      i < 2 * nLine && i % 2 === 1 ? start[i >> 1] : 0,
    );
    here[2 * nLine] = sigma;
    // Amplitudes and continuum are linear: one solution with everything else held starts them.
    this.assemble(here, prior);
    this.holdShapes();
    const linear = this.normal.solve();
    for (let i = 0; i < n; i++) if (!this.isShape(i)) here[i] += linear[i];
    let chiSquare = this.chiSquare(here, prior);
    let converged = false;
    for (let count = 0; count < maxSteps && !converged; count++) {
      this.assemble(here, prior);
      const step = this.normal.solve();
      const limit = this.limit(step, here[2 * nLine]);
      let share = limit;
      let [next, then] = this.tried(here, step, share, prior);
      while (!(then <= chiSquare * (1 + 1e-12)) && share > limit / 64) {
        share /= 4;
        [next, then] = this.tried(here, step, share, prior);
      }
      if (!Number.isFinite(then)) return null;
      converged = share === 1 && this.isSmall(step);
      // Nothing gets better any more: as far down as rounding lets it.
      if (then > chiSquare * (1 + 1e-12)) break;
      converged ||= chiSquare - then < 1e-6 && share === 1;
      here = next;
      chiSquare = then;
    }
    return this.finish(here, prior, chiSquare, freedom, converged);
  }

  private finish(
    here: Float64Array,
    prior: { sigma: number; error: number } | undefined,
    chiSquare: number,
    freedom: number,
    converged: boolean,
  ): LineFit {
    const { nLine, n } = this;
    this.assemble(here, prior);
    const covariance = this.normal.inverse();
    const pick = (offset: number) => Float64Array.from({ length: nLine }, (_, i) => here[2 * i + offset]);
    const errors = (offset: number) =>
      Float64Array.from({ length: nLine }, (_, i) => Math.sqrt(covariance[(2 * i + offset) * (n + 1)]));
    return {
      x: pick(1),
      error: errors(1),
      electrons: pick(0),
      electronsError: errors(0),
      sigma: here[2 * nLine],
      sigmaError: Math.sqrt(covariance[2 * nLine * (n + 1)]),
      ...{ chiSquare, freedom, lightSquare: this.lightSquare, converged },
    };
  }

  private good(j: number): boolean {
    return this.variance[j] > 0 && this.variance[j] < Number.POSITIVE_INFINITY && Number.isFinite(this.flux[j]);
  }

  private isShape(i: number): boolean {
    return (i < 2 * this.nLine && i % 2 === 1) || i === 2 * this.nLine;
  }

  private holdShapes(): void {
    for (let i = 0; i < this.n; i++) if (this.isShape(i)) this.normal.band[i * this.n] += 1e300;
  }

  private edges(here: Float64Array): void {
    const { nLine, from, to, cumulative, density } = this;
    const nEdge = to - from + 1;
    const sigma = here[2 * nLine];
    for (let i = 0; i < nLine; i++) {
      for (let j = 0; j < nEdge; j++) {
        const u = (from + j - 0.5 - here[2 * i + 1]) / sigma;
        cumulative[i * nEdge + j] = normalCumulative(u);
        density[i * nEdge + j] = normalDensity(u);
      }
    }
  }

  /** The model's light of the lines at column j. */
  private light(here: Float64Array, j: number): number {
    const nEdge = this.to - this.from + 1;
    let sum = 0;
    for (let i = 0; i < this.nLine; i++) {
      const at = i * nEdge + j - this.from;
      sum += here[2 * i] * (this.cumulative[at + 1] - this.cumulative[at]);
    }
    return sum;
  }

  private continuum(here: Float64Array, j: number): number {
    return here[this.n - 2] + here[this.n - 1] * (j - 0.5 * (this.from + this.to - 1));
  }

  private chiSquare(here: Float64Array, prior: { sigma: number; error: number } | undefined): number {
    this.edges(here);
    let sum = prior === undefined ? 0 : ((here[2 * this.nLine] - prior.sigma) / prior.error) ** 2;
    this.lightSquare = 0;
    for (let j = this.from; j < this.to; j++) {
      if (!this.good(j)) continue;
      const light = this.light(here, j);
      const off = this.flux[j] - light - this.continuum(here, j);
      sum += (off * off) / this.variance[j];
      this.lightSquare += (light * light) / this.variance[j];
    }
    return sum;
  }

  /** Normal equations for the step from `here`. */
  private assemble(here: Float64Array, prior: { sigma: number; error: number } | undefined): void {
    const { nLine, from, to, row, normal, cumulative, density, n } = this;
    const nEdge = to - from + 1;
    const sigma = here[2 * nLine];
    this.edges(here);
    normal.clear();
    for (let j = from; j < to; j++) {
      if (!this.good(j)) continue;
      row[2 * nLine] = 0;
      for (let i = 0; i < nLine; i++) {
        const at = i * nEdge + j - from;
        const low = (j - 0.5 - here[2 * i + 1]) / sigma;
        const high = low + 1 / sigma;
        row[2 * i] = cumulative[at + 1] - cumulative[at];
        row[2 * i + 1] = (here[2 * i] * (density[at] - density[at + 1])) / sigma;
        row[2 * nLine] += (here[2 * i] * (low * density[at] - high * density[at + 1])) / sigma;
      }
      row[n - 2] = 1;
      row[n - 1] = j - 0.5 * (from + to - 1);
      const off = this.flux[j] - this.light(here, j) - this.continuum(here, j);
      normal.add(this.index, row, n, off, 1 / this.variance[j]);
    }
    if (prior !== undefined) normal.addPrior(2 * nLine, prior.sigma - sigma, 1 / (prior.error * prior.error));
  }

  /** What share of the step keeps every centre and the width within bounds. */
  private limit(step: Float64Array, sigma: number): number {
    let share = 1;
    for (let i = 0; i <= 2 * this.nLine; i++) {
      if (this.isShape(i)) share = Math.min(share, (longestStep * sigma) / Math.max(Math.abs(step[i]), 1e-300));
    }
    return share;
  }

  private tried(
    here: Float64Array,
    step: Float64Array,
    share: number,
    prior: { sigma: number; error: number } | undefined,
  ): [Float64Array, number] {
    const next = here.map((value, i) => value + share * step[i]);
    const sigma = next[2 * this.nLine];
    if (!(sigma > 0.1)) return [next, Number.POSITIVE_INFINITY];
    return [next, this.chiSquare(next, prior)];
  }

  /** After `solve` the diagonal holds 1/D, which is no larger than the unknown's variance. */
  private isSmall(step: Float64Array): boolean {
    for (let i = 0; i <= 2 * this.nLine; i++) {
      if (!this.isShape(i)) continue;
      const variance = this.normal.band[i * this.n];
      if (Math.abs(step[i]) > smallPixels && step[i] * step[i] > smallStep * smallStep * variance) return false;
    }
    return true;
  }
}
