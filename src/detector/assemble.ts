/** Amplifiers put together: counts above the zero level times gain, dispersion along x, before any calibration image.
 *
 *     dispersion along axis 1: x = axis 1, y = axis 2;   along axis 2: x = axis 2, y = axis 1 (transposed) */
import { type Section, sectionSize } from "../fits/sections.js";
import type { Kernels } from "../kernels/module.js";
import type { Amplifier, DetectorLayout } from "./amplifiers.js";
import { MaskBit } from "./frame.js";
import { type FrameArrays, frameArrays } from "./frameMemory.js";
import { type MissingFound, markMissing } from "./missing.js";
import { type OverscanLevel, overscanLevel } from "./overscan.js";
import type { RawImage } from "./raw.js";
import { markSaturated } from "./saturation.js";

/** Part of the turned frame that one amplifier read: x0 ≤ x < x1, y0 ≤ y < y1. */
export interface Region {
  x0: number;
  x1: number;
  y0: number;
  y1: number;
  /** e⁻²: read noise, the zero level's own variance (mean over the region) and jitter of lines. */
  readVariance: number;
  amplifier: Amplifier;
  overscan?: OverscanLevel;
}

export interface Assembled extends FrameArrays {
  name: string;
  nx: number;
  ny: number;
  /** ny × nx, e⁻; NaN where there is no value. */
  electrons: Float32Array;
  /** ny × nx, bits of MaskBit. */
  mask: Uint8Array;
  regions: Region[];
  layout: DetectorLayout;
  missing: MissingFound;
  nSaturated: number;
}

/** Takes the zero level off and multiplies by the gain. Saturation and missing values become mask bits first.
 * Where there is neither overscan nor bias_level the pedestal stays in: the bias stack must take it off.
 * @param kernels the frame gets a memory of their kind. */
export function assemble(raw: RawImage, layout: DetectorLayout, kernels?: Kernels): Assembled {
  const levels = layout.amplifiers.map((amplifier) => overscanLevel(raw, amplifier));
  const fileMask = new Uint8Array(raw.nx * raw.ny);
  const nSaturated = markSaturated(fileMask, raw, layout);
  const missing = markMissing(fileMask, raw, layout, levels);
  const { axis1, axis2 } = layout.geometry;
  const turned = layout.dispersionAxis === 2;
  const [nx, ny] = turned ? [axis2, axis1] : [axis1, axis2];
  const arrays = frameArrays(kernels, nx * ny);
  const electrons = arrays.electrons.fill(Number.NaN);
  const mask = arrays.mask.fill(MaskBit.missing);
  const stride1 = turned ? nx : 1;
  const stride2 = turned ? 1 : nx;
  layout.amplifiers.forEach((amplifier, i) => {
    const { data, place, gain } = amplifier;
    const zero = zeroLevels(amplifier, levels[i]);
    for (let y = 0; y <= data.y2 - data.y1; y++) {
      let to = (place.x1 - 1) * stride1 + (place.y1 - 1 + y) * stride2;
      const start = (data.y1 - 1 + y) * raw.nx + data.x1 - 1;
      for (let x = 0; x <= data.x2 - data.x1; x++, to += stride1) {
        const bits = fileMask[start + x];
        mask[to] = bits;
        if (bits & MaskBit.missing) continue;
        electrons[to] = gain * (raw.data[start + x] - (zero.forRow ? zero.level[y] : zero.level[x]));
      }
    }
  });
  const regions = layout.amplifiers.map((amplifier, i) => regionOf(amplifier, levels[i], turned));
  return { ...arrays, name: raw.name, nx, ny, regions, layout, missing, nSaturated };
}

/** ADU, for each row or each column of the data section. */
function zeroLevels(amplifier: Amplifier, level: OverscanLevel | undefined) {
  const { ny } = sectionSize(amplifier.data);
  if (level === undefined) return { level: new Float64Array(ny).fill(amplifier.biasLevelAdu ?? 0), forRow: true };
  return { level: level.level, forRow: amplifier.levelFor === "rows" };
}

/** Where each amplifier's pixels lie in the turned frame. */
export function regionsOf({ amplifiers, dispersionAxis }: DetectorLayout): Region[] {
  return amplifiers.map((amplifier) => regionOf(amplifier, undefined, dispersionAxis === 2));
}

function regionOf(amplifier: Amplifier, overscan: OverscanLevel | undefined, turned: boolean): Region {
  const { x1, x2, y1, y2 }: Section = amplifier.place;
  const [x0, xEnd, y0, yEnd] = turned ? [y1 - 1, y2, x1 - 1, x2] : [x1 - 1, x2, y1 - 1, y2];
  const region: Region = { x0, x1: xEnd, y0, y1: yEnd, readVariance: readVarianceOf(amplifier, overscan), amplifier };
  if (overscan) region.overscan = overscan;
  return region;
}

function readVarianceOf(amplifier: Amplifier, overscan: OverscanLevel | undefined): number {
  const { gain, readNoise } = amplifier;
  const measured = overscan ? gain * overscan.readNoiseAdu : Number.NaN;
  const readNoiseElectrons = Number.isNaN(readNoise) ? measured : readNoise;
  if (overscan === undefined) return readNoiseElectrons ** 2;
  const level = overscan.levelVariance.reduce((sum, value) => sum + value, 0) / overscan.levelVariance.length;
  return readNoiseElectrons ** 2 + gain * gain * (level + overscan.jitterVariance);
}
