/** Legendre series along x for every fibre, from measured points: fitted robustly where the fibre was seen, and filled from
 * a smooth surface over (slit, x) where it was not. */
import { medianOf } from "../detector/clip.js";
import { type LegendreFit, LegendreFitter, type LegendrePoints } from "../kernels/legendre.js";
import type { Kernels } from "../kernels/module.js";
import { legendreArgument, legendreValue } from "../reference/legendre.js";

/** Points of all fibres on common columns. */
export interface Points {
  /** nGroup: columns, px. */
  x: Float64Array;
  nx: number;
  /** [fibre]: nGroup values; only those of weight > 0 count. */
  value: Float64Array[];
  /** [fibre]: nGroup, inverse variances; 0 for no value. */
  weight: Float64Array[];
  /** nFibre: place along the slit, px. */
  slit: Float64Array;
}

export interface SeriesSet {
  degree: number;
  /** [fibre] */
  coef: Float64Array[];
  /** nFibre: scatter of the points in use about the series; NaN for a fibre filled from its neighbours. */
  rms: Float64Array;
  /** nFibre: points in use. */
  nPoint: Int32Array;
}

const KAPPA = 4;
const MAX_ROUNDS = 10;
/** Fibres that the degree is chosen by, at the most, and in how many turns points are held out. */
const SAMPLE = 60;
const TURNS = 5;
const MAX_HELD_OUT = SAMPLE * TURNS;
/** A fibre seen over less than this share of the columns keeps only a low-order difference from its neighbours. */
const WHOLE_SHARE = 0.85;
const PARTIAL_TERMS = 2;
/** Neighbours that a missing fibre is filled from. */
const NEIGHBOURS = 12;

export class SeriesFitter {
  private readonly fitter: LegendreFitter;
  private readonly t: Float64Array;

  constructor(
    kernels: Kernels,
    private readonly points: Points,
    maxDegree: number,
  ) {
    this.fitter = new LegendreFitter(
      kernels,
      points.x.length,
      maxDegree + 1,
      Math.max(points.value.length, MAX_HELD_OUT),
    );
    this.t = points.x.map((x) => legendreArgument(x, points.nx));
  }

  /** Every fibre's series of that degree. */
  fit(degree: number): SeriesSet {
    const { value, weight } = this.points;
    const nFibre = value.length;
    const coverage = weight.map((w) => this.coverage(w));
    const set: SeriesSet = {
      degree,
      coef: value.map(() => new Float64Array(degree + 1)),
      rms: new Float64Array(nFibre).fill(Number.NaN),
      nPoint: new Int32Array(nFibre),
    };
    const whole = Array.from(weight.keys()).filter(
      (k) => coverage[k] >= WHOLE_SHARE && count(weight[k]) >= 2 * (degree + 1),
    );
    const isWhole = new Uint8Array(nFibre);
    this.fitSeries(
      whole.map((k) => ({ y: value[k], weight: weight[k] })),
      degree,
    ).forEach((fit, i) => {
      isWhole[whole[i]] = 1;
      set.coef[whole[i]].set(fit.coef);
      this.noteScatter(whole[i], fit.used, set);
    });
    // When no fibre is whole there is no surface to lean on: each is fitted to what was seen of it, at low order.
    const models = whole.length > 0 ? whole : this.fitStubs(coverage, degree, set);
    for (let k = 0; k < nFibre; k++) {
      if (isWhole[k] === 1 || (models !== whole && models.includes(k))) continue;
      const surface = this.fromNeighbours(k, models, set);
      set.coef[k] = count(weight[k]) > 2 * PARTIAL_TERMS ? this.correctSurface(k, surface, set) : surface;
    }
    return set;
  }

  /** Smallest degree that predicts points left out about as well as any: chunks of neighbouring columns are held out in
   * five turns. */
  chooseDegree(minDegree: number, maxDegree: number): number {
    const { weight } = this.points;
    const eligible = weight.flatMap((w, k) => (this.coverage(w) >= WHOLE_SHARE && count(w) > 4 * maxDegree ? [k] : []));
    if (eligible.length === 0) return Math.min(3, maxDegree);
    const step = Math.ceil(eligible.length / SAMPLE);
    const sample = eligible.filter((_, i) => i % step === 0);
    const errors: number[] = [];
    for (let degree = minDegree; degree <= maxDegree; degree++)
      errors.push(medianOf(this.heldOutErrors(sample, degree)));
    const best = Math.min(...errors);
    return minDegree + errors.findIndex((error) => error <= 1.02 * best);
  }

  /** Of each fibre the robust size of what points held out differ from the series through the others, px. */
  private heldOutErrors(fibres: number[], degree: number): number[] {
    const { value, weight } = this.points;
    const chunk = Math.max(1, Math.floor(this.t.length / 40));
    const isOut = (g: number, turn: number) => Math.floor(g / chunk) % TURNS === turn;
    const turns = Array.from({ length: TURNS }, (_, turn) => turn);
    const series = fibres.flatMap((k) =>
      turns.map((turn) => ({ y: value[k], weight: weight[k].map((w, g) => (isOut(g, turn) ? 0 : w)) })),
    );
    const fits = this.fitSeries(series, degree);
    return fibres.map((k, i) => {
      const off: number[] = [];
      for (const turn of turns) {
        const { coef } = fits[i * TURNS + turn];
        for (let g = 0; g < this.t.length; g++) {
          if (isOut(g, turn) && weight[k][g] > 0) off.push(Math.abs(value[k][g] - legendreValue(coef, this.t[g])));
        }
      }
      return medianOf(off);
    });
  }

  private fitSeries(series: LegendrePoints[], degree: number): LegendreFit[] {
    return series.length === 0 ? [] : this.fitter.fitAll(this.t, series, degree + 1, KAPPA, MAX_ROUNDS);
  }

  private fitOne(k: number, degree: number, set: SeriesSet): void {
    const { value, weight } = this.points;
    const [fit] = this.fitSeries([{ y: value[k], weight: weight[k] }], degree);
    set.coef[k].set(fit.coef);
    this.noteScatter(k, fit.used, set);
  }

  private noteScatter(k: number, used: Uint8Array, set: SeriesSet): void {
    let sum = 0;
    let n = 0;
    for (let g = 0; g < this.t.length; g++) {
      if (used[g] === 0) continue;
      sum += (this.points.value[k][g] - legendreValue(set.coef[k], this.t[g])) ** 2;
      n++;
    }
    set.rms[k] = n > 0 ? Math.sqrt(sum / n) : Number.NaN;
    set.nPoint[k] = n;
  }

  private fitStubs(coverage: number[], degree: number, set: SeriesSet): number[] {
    const stubs: number[] = [];
    coverage.forEach((share, k) => {
      if (share <= 0) return;
      this.fitOne(k, Math.min(degree, Math.max(1, Math.floor(6 * share) - 1)), set);
      stubs.push(k);
    });
    return stubs;
  }

  /** Each coefficient as a straight line along the slit through the nearest fibres that were seen. */
  private fromNeighbours(k: number, models: number[], set: SeriesSet): Float64Array {
    const { slit } = this.points;
    const nearest = [...models]
      .sort((a, b) => Math.abs(slit[a] - slit[k]) - Math.abs(slit[b] - slit[k]))
      .slice(0, NEIGHBOURS);
    if (nearest.length === 0) return Float64Array.from({ length: set.degree + 1 }, (_, j) => (j === 0 ? slit[k] : 0));
    const farthest = Math.max(...nearest.map((m) => Math.abs(slit[m] - slit[k])), 1e-9);
    const sums = nearest.map((m) => ({
      m,
      d: slit[m] - slit[k],
      w: 1 - 0.9 * (Math.abs(slit[m] - slit[k]) / farthest) ** 2,
    }));
    const total = (of: (s: { m: number; d: number; w: number }) => number) =>
      sums.reduce((sum, s) => sum + s.w * of(s), 0);
    const [s0, s1, s2] = [total(() => 1), total((s) => s.d), total((s) => s.d * s.d)];
    const determinant = s0 * s2 - s1 * s1;
    return Float64Array.from({ length: set.degree + 1 }, (_, j) => {
      const [r0, r1] = [total((s) => set.coef[s.m][j]), total((s) => s.d * set.coef[s.m][j])];
      return determinant > 1e-9 * s0 * s2
        ? (r0 * s2 - r1 * s1) / determinant
        : r0 / s0 + (j === 0 ? slit[k] - slit[sums[0].m] : 0);
    });
  }

  /** The surface moved and tilted onto what was seen of the fibre. */
  private correctSurface(k: number, surface: Float64Array, set: SeriesSet): Float64Array {
    const { value, weight } = this.points;
    const rest = value[k].map((v, g) => (weight[k][g] > 0 ? v - legendreValue(surface, this.t[g]) : 0));
    const nTerm = this.coverage(weight[k]) > 0.3 ? PARTIAL_TERMS : 1;
    const fit = this.fitter.fit(this.t, rest, weight[k], nTerm, KAPPA, MAX_ROUNDS);
    const coef = surface.map((c, j) => c + (j < nTerm ? fit.coef[j] : 0));
    set.coef[k] = coef;
    this.noteScatter(k, fit.used, set);
    return coef;
  }

  /** Share of the columns between which the fibre has points; half of its holes is taken off. */
  private coverage(weight: Float64Array): number {
    const n = count(weight);
    if (n === 0) return 0;
    let last = weight.length - 1;
    while (weight[last] === 0) last--;
    const span = (last - weight.findIndex((w) => w > 0) + 1) / weight.length;
    return 0.5 * (span + n / weight.length);
  }
}

function count(weight: Float64Array): number {
  let n = 0;
  for (let g = 0; g < weight.length; g++) if (weight[g] > 0) n++;
  return n;
}
