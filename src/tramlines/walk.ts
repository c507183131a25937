/** Walking outward from the cut: where the fibres are in groups of columns further out, predicted from what is behind and
 * corrected by window centroids. All fibres move together, smoothly along the slit, so that a dim fibre is carried by its
 * neighbours and none can change places with the next. */
import { Centroider } from "../kernels/centroid.js";
import { LegendreFitter } from "../kernels/legendre.js";
import type { Kernels } from "../kernels/module.js";
import type { ColumnRange } from "../reference/groups.js";
import { type ColumnGroup, type Flat, groupColumns, groupStep } from "./flat.js";

/** Columns that a step averages. */
const STEP_COLUMNS = 8;
/** Window of the centroids, ± this share of the pitch. */
const WINDOW_SHARE = 0.5;
/** Fibres that suffice to show the motion, at the least. */
const ENOUGH_GUIDES = 200;
/** Terms of the common motion along the slit. */
const MOTION_TERMS = 4;

export interface Path {
  /** nStep, ascending: middle columns. */
  x: Float64Array;
  /** nStep × nFibre: y, px. */
  centre: Float64Array;
}

/** @param centre nFibre, y in column `x0`. @param guides fibres with light, which show the motion.
 * @param slope px of y per px of x at x0. */
export function walkOutward(
  kernels: Kernels,
  flat: Flat,
  centre: Float64Array,
  guides: number[],
  x0: number,
  slope: number,
  pitch: number,
): Path {
  const nFibre = centre.length;
  const groups = groupColumns(kernels, flat, stepsOf(flat.nx));
  const path: Path = {
    x: Float64Array.from(groups, (group) => group.x),
    centre: new Float64Array(groups.length * nFibre),
  };
  const oneIn = Math.max(1, Math.floor(guides.length / ENOUGH_GUIDES));
  const some = guides.filter((_, i) => i % oneIn === 0);
  const meter = new MotionMeter(kernels, flat.ny, some, pitch);
  const start = path.x.reduce((best, x, step) => (Math.abs(x - x0) < Math.abs(path.x[best] - x0) ? step : best), 0);
  for (const direction of [1, -1]) {
    let here = Float64Array.from(centre, (y) => y + slope * (path.x[start] - x0));
    let motion = new Float64Array(nFibre).fill(direction * slope * groupStep(flat.nx));
    for (let step = start; step >= 0 && step < groups.length; step += direction) {
      const predicted = step === start ? here : here.map((y, k) => y + motion[k]);
      const found = meter.follow(groups[step], predicted);
      // Half of each correction goes into the motion: it keeps pace with curvature without echoing noise.
      if (step !== start) motion = motion.map((m, k) => m + 0.5 * (found[k] - predicted[k]));
      path.centre.set(found, step * nFibre);
      here = found;
    }
  }
  return path;
}

/** A few columns in the middle of each step. */
function stepsOf(nx: number): ColumnRange[] {
  const step = groupStep(nx);
  const inset = (step - STEP_COLUMNS) >> 1;
  const ranges: ColumnRange[] = [];
  for (let from = inset; from + STEP_COLUMNS <= nx; from += step) ranges.push({ from, to: from + STEP_COLUMNS });
  return ranges.length > 0 ? ranges : [{ from: 0, to: Math.min(nx, STEP_COLUMNS) }];
}

/** Where the walk saw all fibres in column x, linear between its steps. */
export function pathAt(path: Path, nFibre: number, x: number): Float64Array {
  const n = path.x.length;
  let step = 0;
  while (step < n - 2 && path.x[step + 1] < x) step++;
  const next = Math.min(n - 1, step + 1);
  const span = path.x[next] - path.x[step];
  const share = span > 0 ? (x - path.x[step]) / span : 0;
  const here = path.centre.subarray(step * nFibre, (step + 1) * nFibre);
  const there = path.centre.subarray(next * nFibre, (next + 1) * nFibre);
  return here.map((y, k) => y + share * (there[k] - y));
}

/** Measures how far all fibres stand from where they are thought. */
class MotionMeter {
  private readonly centroider: Centroider;
  private readonly fitter: LegendreFitter;

  constructor(
    kernels: Kernels,
    private readonly ny: number,
    private readonly guides: number[],
    private readonly pitch: number,
  ) {
    this.centroider = new Centroider(kernels, ny);
    this.fitter = new LegendreFitter(kernels, guides.length, MOTION_TERMS);
  }

  /** The centres moved to the light, in three rounds; as they were where there is too little light. */
  follow(group: ColumnGroup, predicted: Float64Array): Float64Array<ArrayBuffer> {
    this.centroider.load(
      group.mean,
      Float64Array.from(group.count, (n) => (n > 0 ? 1 : 0)),
    );
    let centre = Float64Array.from(predicted);
    for (let round = 0; round < 3; round++) {
      const offset = this.guides.map((k) => this.offset(group, centre[k]));
      const use = offset.map((d) => (Number.isFinite(d) ? 1 : 0));
      const nUse = use.reduce<number>((sum, u) => sum + u, 0);
      if (nUse < Math.max(3, 0.3 * this.guides.length)) {
        if (nUse === 0 || this.guides.length > 3) return centre;
      }
      const nTerm = Math.max(1, Math.min(MOTION_TERMS, Math.floor(nUse / 6)));
      const t = this.guides.map((k) => this.argument(centre[k]));
      const { coef } = this.fitter.fit(t, offset, use, nTerm, 4, 8);
      centre = centre.map((y) => y + evaluate(coef, this.argument(y)));
    }
    return centre;
  }

  private argument(y: number): number {
    return Math.max(-1, Math.min(1, (2 * y) / Math.max(1, this.ny - 1) - 1));
  }

  /** Window centroid less centre; NaN where the light is too faint to tell from noise, or at the detector's edge. */
  private offset(group: ColumnGroup, centre: number): number {
    const half = WINDOW_SHARE * this.pitch;
    const from = Math.ceil(centre - half);
    const to = Math.floor(centre + half);
    if (from < 1 || to > this.ny - 2) return Number.NaN;
    let lowest = Number.POSITIVE_INFINITY;
    let highest = Number.NEGATIVE_INFINITY;
    let noise = 0;
    for (let y = from; y <= to; y++) {
      if (group.count[y] === 0) return Number.NaN;
      lowest = Math.min(lowest, group.mean[y]);
      highest = Math.max(highest, group.mean[y]);
      noise = Math.max(noise, group.fixedVariance[y] + group.variancePerElectron[y] * Math.max(0, group.mean[y]));
    }
    if (!(highest - lowest > 8 * Math.sqrt(noise))) return Number.NaN;
    return this.centroider.measure(centre, half, lowest) - centre;
  }
}

/** Σ c_j P_j(t) for at most four terms. */
function evaluate(coef: Float64Array, t: number): number {
  const [c0, c1 = 0, c2 = 0, c3 = 0] = coef;
  return c0 + c1 * t + c2 * (1.5 * t * t - 0.5) + c3 * (2.5 * t * t - 1.5) * t;
}
