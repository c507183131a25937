/** What the fit of a dispersion may believe: how well centres, fibres' offsets and the list's wavelengths are known, which lines
 * and which points cannot be true. */
import { SIGMA_PER_MAD } from "../detector/clip.js";
import { median } from "../reference/median.js";
import {
  type DispersionFrame,
  type DispersionState,
  type LinePoint,
  residualPixels,
  type Scatters,
  type Solved,
  Surface,
} from "./dispersionSystem.js";

export interface DroppedLine {
  line: number;
  /** Å by which it was seen above its wavelength in the list. */
  off: number;
  nFibre: number;
}

/** A fibre with fewer lines is filled from its neighbours. */
const fewestInFibre = 3;
/** Lines without which there is no dispersion. */
export const fewestLines = 4;
const kappa = 5;
const lineKappa = 5;
/** Columns: an error of the list that is never worth dropping a line for. */
const leastLinePixels = 0.01;
/** Nothing is known better than this: columns, columns, Å. */
const leastFibreScatter = 0.001;
const leastFloor = 0.0003;
const leastLineScatter = 0.0005;
/** Å per column in the middle, without its sign. */
export function slopeOf(frame: DispersionFrame, { terms, surface }: DispersionState): number {
  const model = new Surface(frame, terms);
  model.at(surface, (frame.nx - 1) / 2, Math.floor(frame.nFibre / 2));
  return Math.abs(model.slope);
}

/** Points of fibres with too few lines are left out: nothing would check them. */
export function withoutSparse(points: LinePoint[], used: Uint8Array): Uint8Array {
  const lines = new Map<number, Set<number>>();
  points.forEach(({ fibre, line }, p) => {
    if (used[p] === 1) lines.set(fibre, (lines.get(fibre) ?? new Set()).add(line));
  });
  return used.map((value, p) => ((lines.get(points[p].fibre)?.size ?? 0) < fewestInFibre ? 0 : value));
}

/** Robust scatter of centres, of fibres' offsets and of lines' errors. */
export function estimateScatters(
  frame: DispersionFrame,
  points: LinePoint[],
  used: Uint8Array,
  state: DispersionState,
  { offsetVariance }: Solved,
  before: Scatters,
): Scatters {
  const kept = points.filter((_, p) => used[p] === 1);
  const off = Array.from(residualPixels(frame, state, kept));
  const errors = kept.map(({ error }) => error);
  const typical = median(errors);
  const bright = [...off.keys()].filter((p) => errors[p] <= typical);
  const spread = SIGMA_PER_MAD * median(bright.map((p) => Math.abs(off[p])));
  const expected = median(bright.map((p) => errors[p]));
  const floor = Math.sqrt(Math.max(leastFloor * leastFloor, spread * spread - expected * expected));
  const scaled = off.map((value, p) => Math.abs(value) / Math.sqrt(errors[p] * errors[p] + floor * floor));
  const fibres = [...new Set(kept.map(({ fibre }) => fibre))];
  const ownSquare = (SIGMA_PER_MAD * median(fibres.map((k) => Math.abs(state.offset[k])))) ** 2;
  const known = median(fibres.map((k) => offsetVariance[k]));
  const lines = [...lineMeans(frame, kept, state, before).values()];
  const spare = lines.length / Math.max(1, lines.length - state.terms.nX);
  const lineSquare = spare * (SIGMA_PER_MAD * median(lines.map(({ off: seen }) => Math.abs(seen)))) ** 2;
  const lineKnown = median(lines.map(({ variance }) => variance));
  return {
    fibre: fibres.length < 4 ? before.fibre : Math.sqrt(Math.max(leastFibreScatter ** 2, ownSquare + known)),
    line: Math.sqrt(Math.max(leastLineScatter ** 2, lineSquare - lineKnown)),
    floor,
    scale: Math.max(1, SIGMA_PER_MAD * median(scaled)),
  };
}

/** By line: Å by which all fibres together see it above its wavelength in the list, and the variance of that. */
function lineMeans(
  frame: DispersionFrame,
  points: LinePoint[],
  { surface, terms, offset, exposure }: DispersionState,
  { floor, scale }: Scatters,
): Map<number, { off: number; variance: number; fibres: Set<number> }> {
  const model = new Surface(frame, terms);
  const sums = new Map<number, { weight: number; moment: number; fibres: Set<number> }>();
  for (const point of points) {
    model.at(surface, point.x - exposure[point.exposure] - offset[point.fibre], point.fibre);
    const sum = sums.get(point.line) ?? { weight: 0, moment: 0, fibres: new Set() };
    const weight = 1 / ((point.error ** 2 + floor * floor) * (scale * model.slope) ** 2);
    sum.weight += weight;
    sum.moment += weight * (model.wavelength - frame.wavelength[point.line]);
    sum.fibres.add(point.fibre);
    sums.set(point.line, sum);
  }
  return new Map(
    Array.from(sums, ([line, { weight, moment, fibres }]) => [
      line,
      { off: moment / weight, variance: 1 / weight, fibres },
    ]),
  );
}

/** Lines that are off beyond doubt: the worst, and those that are half as bad. */
export function wrongLines(
  frame: DispersionFrame,
  points: LinePoint[],
  state: DispersionState,
  scatters: Scatters,
): DroppedLine[] {
  const means = lineMeans(frame, points, state, scatters);
  const lines = [...means.keys()].sort((a, b) => Math.abs(means.get(b)!.off) - Math.abs(means.get(a)!.off));
  const spare = Math.max(0, lines.length - Math.max(fewestLines, state.terms.nX + 2));
  const least = Math.max(leastLinePixels * slopeOf(frame, state), Math.abs(means.get(lines[0])!.off) / 2);
  const wrong = lines.filter((line) => {
    const { off, variance } = means.get(line)!;
    return Math.abs(off) >= least && off * off > lineKappa * lineKappa * (scatters.line ** 2 + variance);
  });
  return wrong.slice(0, spare).map((line) => {
    const { off, fibres } = means.get(line)!;
    return { line, off, nFibre: fibres.size };
  });
}

/** Which points lie within `kappa` of the fit: [point], 1 or 0; never those of dropped lines. */
export function clipped(
  frame: DispersionFrame,
  points: LinePoint[],
  state: DispersionState,
  { floor, scale }: Scatters,
  dropped: DroppedLine[],
): Uint8Array {
  const out = new Set(dropped.map(({ line }) => line));
  const residual = residualPixels(frame, state, points);
  return Uint8Array.from(points, ({ line, error }, p) => {
    const limit = kappa * scale * Math.sqrt(error * error + floor * floor);
    return !out.has(line) && Math.abs(residual[p]) <= limit ? 1 : 0;
  });
}
