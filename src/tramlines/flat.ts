/** The fibre flat to trace: one frame, or several combined so that no cosmic ray survives, and means over groups of
 * neighbouring columns of it. */
import { medianOf } from "../detector/clip.js";
import { type Frame, MaskBit } from "../detector/frame.js";
import { TraceError } from "./errors.js";

/** Two frames that differ by more than this many σ at a pixel: the lower one counts. */
const KAPPA_PAIR = 5;

export interface Flat {
  name: string;
  nx: number;
  ny: number;
  /** ny × nx, e⁻, mean of the frames used. */
  electrons: Float32Array;
  /** ny × nx, bits of MaskBit that all frames have. */
  mask: Uint8Array;
  /** ny × nx: frames in the mean. */
  nUsed: Uint8Array;
  /** The first frame's, for one frame. */
  frame: Frame;
}

/** Mean of flats of one readout window, scaled to the first one's level; at a pixel where one lies more than 5 σ above
 * the lowest, it is left out.
 * @throws TraceError when they are of different readout windows. */
export function combineFlats(frames: Frame[]): Flat {
  const [first] = frames;
  if (first === undefined) throw new TraceError("No fibre flat was given; one at least is needed to trace.");
  for (const frame of frames) {
    if (frame.geometry.digest !== first.geometry.digest || frame.nx !== first.nx || frame.ny !== first.ny) {
      throw new TraceError(
        `${frame.name}: ${frame.nx} × ${frame.ny} pixels of readout window ${frame.geometry.digest}, but ${first.name} has ` +
          `${first.nx} × ${first.ny} of ${first.geometry.digest}; flats must come from the same readout window.`,
      );
    }
  }
  const { nx, ny } = first;
  const electrons = new Float32Array(nx * ny);
  const mask = new Uint8Array(nx * ny);
  const nUsed = new Uint8Array(nx * ny);
  const levels = frames.map((frame) => relativeLevel(frame, first));
  const values = new Float64Array(frames.length);
  for (let at = 0; at < nx * ny; at++) {
    let n = 0;
    let bits = 0xff;
    let lowest = Number.POSITIVE_INFINITY;
    frames.forEach((frame, f) => {
      bits &= frame.mask[at] | (Number.isNaN(frame.electrons[at]) ? MaskBit.missing : 0);
      if (frame.mask[at] !== 0 || Number.isNaN(frame.electrons[at])) return;
      values[n] = frame.electrons[at] / levels[f];
      lowest = Math.min(lowest, values[n++]);
    });
    if (n === 0) {
      electrons[at] = Number.NaN;
      mask[at] = bits === 0 ? MaskBit.bad : bits;
      continue;
    }
    const limit = lowest + KAPPA_PAIR * Math.sqrt(2 * pixelVariance(first, at, lowest) + (0.02 * lowest) ** 2);
    let sum = 0;
    let kept = 0;
    for (let i = 0; i < n; i++) {
      if (values[i] > limit) continue;
      sum += values[i];
      kept++;
    }
    electrons[at] = sum / kept;
    nUsed[at] = kept;
  }
  return { name: frames.map((frame) => frame.name).join(", "), nx, ny, electrons, mask, nUsed, frame: first };
}

/** How bright a frame is against another, from the pixels that are bright in both. */
function relativeLevel(frame: Frame, first: Frame): number {
  if (frame === first) return 1;
  const ratios: number[] = [];
  const step = Math.max(1, Math.floor(frame.electrons.length / 50_000)) | 1;
  let brightest = 0;
  for (let at = 0; at < frame.electrons.length; at += step) {
    if (first.mask[at] === 0) brightest = Math.max(brightest, first.electrons[at]);
  }
  for (let at = 0; at < frame.electrons.length; at += step) {
    if (first.mask[at] === 0 && frame.mask[at] === 0 && first.electrons[at] > 0.1 * brightest) {
      ratios.push(frame.electrons[at] / first.electrons[at]);
    }
  }
  const level = medianOf(ratios);
  return level > 0.05 && level < 20 ? level : 1;
}

/** Variance of one frame's pixel whose model is `model` electrons, e⁻². */
export function pixelVariance(frame: Frame, at: number, model: number): number {
  const { noise, nx } = frame;
  const y = Math.floor(at / nx);
  const fixed = noise.fixedVarianceImage?.[at] ?? noise.fixedVariance[noise.bandOfRow[y] * nx + (at - y * nx)];
  const light = Math.max(model, 0);
  return (
    fixed + light * (noise.inverseResponse?.[at] ?? 1) + (noise.responseRelativeVariance?.[at] ?? 0) * light * light
  );
}

/** The mean of some neighbouring columns, cosmic rays left out. All arrays [ny]. */
export interface ColumnGroup {
  /** Middle of the columns, pixels. */
  x: number;
  /** Columns. */
  width: number;
  /** e⁻ per pixel; NaN where no pixel is good. */
  mean: Float64Array;
  /** Pixels in the mean. */
  count: Uint16Array;
  /** e⁻²: variance of the mean without light. */
  fixedVariance: Float64Array;
  /** e⁻² per e⁻ of light. */
  variancePerElectron: Float64Array;
}

/** A pixel counts as hit by a cosmic ray when it stands above its row's median in the group by this many σ, and by half
 * of what the neighbouring rows differ (a tilted tramline changes the light along a row by less). */
const KAPPA_HIT = 8;

/** Columns `from` … `to − 1`. */
export function groupColumns(flat: Flat, from: number, to: number): ColumnGroup {
  const { ny } = flat;
  const group: ColumnGroup = {
    x: 0.5 * (from + to - 1),
    width: to - from,
    mean: new Float64Array(ny),
    count: new Uint16Array(ny),
    fixedVariance: new Float64Array(ny),
    variancePerElectron: new Float64Array(ny),
  };
  const rowMedian = rowMedians(flat, from, to);
  for (let y = 0; y < ny; y++) {
    const slope = 0.5 * spread(rowMedian[Math.max(0, y - 1)], rowMedian[y], rowMedian[Math.min(ny - 1, y + 1)]);
    averageRow(flat, from, to, y, rowMedian[y], slope, group);
  }
  return group;
}

function rowMedians(flat: Flat, from: number, to: number): Float64Array {
  const { nx, ny, electrons, nUsed } = flat;
  const medians = new Float64Array(ny);
  const sorted = new Float64Array(to - from);
  for (let y = 0; y < ny; y++) {
    let n = 0;
    for (let at = y * nx + from; at < y * nx + to; at++) {
      if (nUsed[at] === 0) continue;
      const value = electrons[at];
      let place = n++;
      for (; place > 0 && sorted[place - 1] > value; place--) sorted[place] = sorted[place - 1];
      sorted[place] = value;
    }
    const half = n >> 1;
    medians[y] = n === 0 ? Number.NaN : n % 2 === 1 ? sorted[half] : 0.5 * (sorted[half - 1] + sorted[half]);
  }
  return medians;
}

function averageRow(
  flat: Flat,
  from: number,
  to: number,
  y: number,
  rowMedian: number,
  slope: number,
  group: ColumnGroup,
): void {
  const { nx, electrons, nUsed, frame } = flat;
  const { inverseResponse } = frame.noise;
  let sum = 0;
  let fixed = 0;
  let perElectron = 0;
  let n = 0;
  for (let x = from; x < to; x++) {
    const at = y * nx + x;
    if (nUsed[at] === 0) continue;
    const excess = electrons[at] - rowMedian - slope;
    if (excess > 0 && excess * excess * nUsed[at] > KAPPA_HIT * KAPPA_HIT * pixelVariance(frame, at, rowMedian))
      continue;
    sum += electrons[at];
    fixed += pixelVariance(frame, at, 0) / nUsed[at];
    perElectron += (inverseResponse === undefined ? 1 : inverseResponse[at]) / nUsed[at];
    n++;
  }
  group.count[y] = n;
  group.mean[y] = sum / n;
  group.fixedVariance[y] = fixed / (n * n);
  group.variancePerElectron[y] = perElectron / (n * n);
}

function spread(below: number, here: number, above: number): number {
  const b = Number.isNaN(below) ? 0 : below;
  const h = Number.isNaN(here) ? 0 : here;
  const a = Number.isNaN(above) ? 0 : above;
  return Math.max(b, h, a) - Math.min(b, h, a);
}
