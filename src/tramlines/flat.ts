/** The fibre flat to trace: one frame, or several combined so that no cosmic ray survives, and means over groups of
 * neighbouring columns of it. */
import { medianOf } from "../detector/clip.js";
import { type Frame, MaskBit } from "../detector/frame.js";
import { groupColumns as groupMeans } from "../kernels/groups.js";
import type { Kernels } from "../kernels/module.js";
import type { ColumnRange, GroupMean } from "../reference/groups.js";
import { TraceError } from "./errors.js";

/** Two frames that differ by more than this many σ at a pixel: the lower one counts. */
const KAPPA_PAIR = 5;

export interface Flat {
  name: string;
  /** Frames that it was made of. */
  nFrame: number;
  nx: number;
  ny: number;
  /** ny × nx, e⁻, mean of the frames used; means nothing where none is. */
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
  const name = frames.map((frame) => frame.name).join(", ");
  if (frames.length === 1) return { name, nFrame: 1, nx: first.nx, ny: first.ny, ...singleFlat(first), frame: first };
  return { name, nFrame: frames.length, nx: first.nx, ny: first.ny, ...meanOf(frames, first), frame: first };
}

type FlatLight = Pick<Frame, "electrons" | "mask">;

/** What may be taken for a flat: flats that were combined already, or are to be. */
export function flatOf(given: Flat | Frame | Frame[]): Flat {
  return "nUsed" in given ? given : combineFlats([given].flat());
}

type FlatPixels = Pick<Flat, "electrons" | "mask" | "nUsed">;

/** Of one frame nothing is copied but what it may lack: a mark on pixels without value. */
function singleFlat({ electrons, mask: given }: Frame): FlatPixels {
  const nUsed = new Uint8Array(electrons.length);
  let mask = given;
  for (let at = 0; at < nUsed.length; at++) {
    if (!Number.isNaN(electrons[at])) {
      nUsed[at] = given[at] === 0 ? 1 : 0;
    } else if ((given[at] & MaskBit.missing) === 0) {
      if (mask === given) mask = given.slice();
      mask[at] |= MaskBit.missing;
    }
  }
  return { electrons, mask, nUsed };
}

function meanOf(frames: Frame[], first: Frame): FlatPixels {
  const { nx, ny } = first;
  const electrons = new Float32Array(nx * ny);
  const mask = new Uint8Array(nx * ny);
  const nUsed = new Uint8Array(nx * ny);
  const levels = frames.map((frame) => (frame === first ? 1 : flatLevel(frame, first)));
  const light = frames.map((frame) => frame.electrons);
  const bits = frames.map((frame) => frame.mask);
  const values = new Float64Array(frames.length);
  for (let at = 0; at < nx * ny; at++) {
    let n = 0;
    let shared = 0xff;
    let lowest = Number.POSITIVE_INFINITY;
    for (let f = 0; f < light.length; f++) {
      const value = light[f][at];
      const isMissing = Number.isNaN(value);
      shared &= bits[f][at] | (isMissing ? MaskBit.missing : 0);
      if (bits[f][at] !== 0 || isMissing) continue;
      values[n] = value / levels[f];
      if (values[n] < lowest) lowest = values[n];
      n++;
    }
    if (n === 0) {
      electrons[at] = Number.NaN;
      mask[at] = shared === 0 ? MaskBit.bad : shared;
      continue;
    }
    const limit = lowest + KAPPA_PAIR * Math.sqrt(pairSigma2(first, at, lowest));
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
  return { electrons, mask, nUsed };
}

/** How bright a frame is against another, from the pixels that are bright in both. */
export function flatLevel(frame: FlatLight, first: FlatLight): number {
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

/** Variance of the difference of two flats at a pixel of `level` electrons, 2 % of it allowed for what is no noise. e⁻². */
export function pairSigma2(frame: Frame, at: number, level: number): number {
  return 2 * pixelVariance(frame, at, level) + (0.02 * level) ** 2;
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

/** The mean of some neighbouring columns, cosmic rays left out. */
export interface ColumnGroup extends GroupMean {
  /** Middle of the columns, pixels. */
  x: number;
  /** Columns. */
  width: number;
}

/** Groups that the whole width is cut into, at the most. */
const MAX_GROUPS = 128;
const MIN_COLUMNS = 8;

/** Columns from one group to the next. */
export function groupStep(nx: number): number {
  return Math.max(MIN_COLUMNS, Math.ceil(nx / MAX_GROUPS));
}

/** One group for each range of columns. */
export function groupColumns(kernels: Kernels, flat: Flat, ranges: ColumnRange[]): ColumnGroup[] {
  const means = groupMeans(kernels, { ...flat, noise: flat.frame.noise }, ranges);
  return ranges.map(({ from, to }, g) => ({ x: 0.5 * (from + to - 1), width: to - from, ...means[g] }));
}
