/** How bright the sky's lines are in each fibre, group by group, where they change along the slit: a factor on the lines alone.
 *
 * Around each line the spectrum less the sky is fitted by a + b x + δ L, L the sky's light above its level between lines. δ of a
 * group is the mean over its lines with a prior 0 ± 0.05, each line's say limited to 2 σ of the mean (Huber), so that a target's
 * own line on one of them does not set it. Groups of one or two lines have no such witness: their δ is taken only where L itself
 * describes what is left (χ² below 2 per degree). Lines that do not rise 3 σ above the fibre's own noise say nothing. A bright target's
 * lines on the only line of a group can still be mistaken for sky: leave scaling off where they matter. */
import { medianOf } from "../detector/clip.js";
import type { Spectra } from "../extraction/spectra.js";
import { type BSpline, splineValues } from "./bspline.js";
import type { Medium } from "./medium.js";
import { airToVacuum } from "./refraction.js";
import { isBetween, type SkyLinesSeen } from "./skyCheck.js";
import { SKY_GROUPS } from "./skyGroups.js";

const PRIOR = 0.05;
const MOST = 0.25;
const LEAST_PEAK = 3;
const MOST_CHI2 = 2;
const LIMIT = 2;
/** Columns beside a line that fix the target's own light below it. */
const MARGIN = 4;
const HALF_WINDOW = 40;

export interface SkyScales {
  groups: string[];
  /** nFibre × groups: factor on the lines; 1 where nothing was told. */
  factor: Float64Array;
  error: Float64Array;
  /** nFibre × nx: what to take off beside the sky, and its variance. */
  extra: Float64Array;
  variance: Float64Array;
}

/** @param residual spectra with the sky off, in light of a fibre of throughput 1.
 * @param values nFibre × nx: the sky that was taken off. */
export function scaleSky(
  residual: Spectra,
  wavelengths: Float64Array,
  medium: Medium,
  spline: BSpline,
  values: Float64Array,
  lines: SkyLinesSeen,
): SkyScales {
  const { nFibre, nx } = residual;
  const groups = SKY_GROUPS.map(({ windows }) =>
    medium === "air" ? windows : windows.map((edges) => edges.map(airToVacuum) as [number, number]),
  );
  const level = levelBetween(spline, lines);
  const size = nFibre * groups.length;
  const scales: SkyScales = {
    groups: SKY_GROUPS.map(({ name }) => name),
    factor: new Float64Array(size).fill(1),
    error: new Float64Array(size).fill(Number.NaN),
    extra: new Float64Array(nFibre * nx),
    variance: new Float64Array(nFibre * nx),
  };
  for (let k = 0; k < nFibre; k++) {
    const from = k * nx;
    const row = wavelengths.subarray(from, from + nx);
    const light = values.slice(from, from + nx).map((value, x) => {
      const above = isBetween(lines, row[x]) ? 0 : value - level(row[x]);
      return Number.isFinite(above) ? above : 0;
    });
    groups.forEach((windows, g) => {
      const at = (x: number) => windows.some(([low, high]) => row[x] >= low && row[x] < high);
      const { shift, error } = combine(lineShifts(residual, from, light, at));
      if (!(error < PRIOR)) return;
      scales.factor[k * groups.length + g] = 1 + shift;
      scales.error[k * groups.length + g] = error;
      for (let x = 0; x < nx; x++) {
        if (!at(x)) continue;
        scales.extra[from + x] = shift * light[x];
        scales.variance[from + x] = (error * light[x]) ** 2;
      }
    });
  }
  return scales;
}

/** The sky between its lines, at any wavelength: running median over the sky's own cells. */
function levelBetween(spline: BSpline, { breaks, between }: SkyLinesSeen): (wavelength: number) => number {
  const middles = breaks.subarray(1).map((upper, i) => 0.5 * (upper + breaks[i]));
  const light = splineValues(spline, middles).map((value, i) => (between[i] === 1 ? value : Number.NaN));
  const level = light.map((_, i) => medianOf(light.subarray(Math.max(0, i - HALF_WINDOW), i + HALF_WINDOW + 1)));
  return (wavelength) => {
    let [low, high] = [0, middles.length - 1];
    while (high - low > 1) {
      const middle = (low + high) >> 1;
      if (middles[middle] <= wavelength) low = middle;
      else high = middle;
    }
    return level[low] + ((wavelength - middles[low]) / (middles[high] - middles[low])) * (level[high] - level[low]);
  };
}

interface LineShift {
  shift: number;
  variance: number;
  chi2: number;
}

/** δ of every stretch of lines of a group. `light`: nx, above the level, 0 between lines. */
function lineShifts(residual: Spectra, from: number, light: Float64Array, at: (x: number) => boolean): LineShift[] {
  const shifts: LineShift[] = [];
  for (let x = 0; x < light.length; x++) {
    if (light[x] === 0 || !at(x)) continue;
    const first = x;
    while (x + 1 < light.length && light[x + 1] !== 0 && at(x + 1)) x++;
    const one = fitLine(residual, from, light, Math.max(0, first - MARGIN), Math.min(light.length - 1, x + MARGIN));
    if (one !== null) shifts.push(one);
  }
  return shifts;
}

/** Weighted least squares of a + b x + δ L; null where the line tells nothing. */
function fitLine(
  { flux, variance }: Spectra,
  from: number,
  light: Float64Array,
  first: number,
  last: number,
): LineShift | null {
  const rows: { basis: [number, number, number]; y: number; weight: number }[] = [];
  const typical = medianOf(variance.subarray(from + first, from + last + 1));
  let peak = 0;
  for (let x = first; x <= last; x++) {
    const [y, v] = [flux[from + x], Math.max(variance[from + x], typical)];
    if (!Number.isFinite(y) || !(v > 0)) continue;
    rows.push({ basis: [1, x - 0.5 * (first + last), light[x]], y, weight: 1 / v });
    peak = Math.max(peak, light[x] / Math.sqrt(v));
  }
  if (rows.length < 6 || peak < LEAST_PEAK) return null;
  // Gram–Schmidt: L less its part along 1 and x is what δ alone explains.
  const dot = (a: number[], b: number[]) => rows.reduce((sum, { weight }, i) => sum + weight * a[i] * b[i], 0);
  const column = (j: number) => rows.map(({ basis }) => basis[j]);
  const less = (a: number[], b: number[]) => {
    const share = dot(a, b) / dot(b, b);
    return a.map((value, i) => value - share * b[i]);
  };
  const one = column(0);
  const slope = less(column(1), one);
  const rest = (a: number[]) => less(less(a, one), slope);
  const [alone, y] = [rest(column(2)), rest(rows.map((row) => row.y))];
  const norm = dot(alone, alone);
  const shift = dot(alone, y) / norm;
  const left = y.map((value, i) => value - shift * alone[i]);
  return { shift, variance: 1 / norm, chi2: dot(left, left) / (rows.length - 3) };
}

/** Mean with the prior; error Infinity where the group says nothing. */
function combine(shifts: LineShift[]): { shift: number; error: number } {
  const told = shifts.length > 2 ? shifts : shifts.filter(({ chi2 }) => chi2 < MOST_CHI2);
  if (told.length === 0) return { shift: 0, error: Number.POSITIVE_INFINITY };
  let mean = told.length > 2 ? medianOf(told.map(({ shift }) => shift)) : 0;
  let information = 0;
  for (let turn = 0; turn < 10; turn++) {
    let sum = 0;
    information = 1 / PRIOR ** 2;
    for (const { shift, variance } of told) {
      const pull = Math.abs(shift - mean) / Math.sqrt(variance);
      const weight = (told.length > 2 && pull > LIMIT ? LIMIT / pull : 1) / variance;
      sum += weight * shift;
      information += weight;
    }
    mean = sum / information;
  }
  return { shift: Math.max(-MOST, Math.min(MOST, mean)), error: 1 / Math.sqrt(information) };
}
