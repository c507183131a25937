/** Amplifiers put together: counts above the zero level times gain, dispersion along x, before any calibration image.
 *
 *     dispersion along axis 1: x = axis 1, y = axis 2;   along axis 2: x = axis 2, y = axis 1 (transposed) */
import { type Section, sectionSize } from "../fits/sections.js";
import type { Kernels, Workbench } from "../kernels/module.js";
import type { AmplifierCounts } from "../reference/electrons.js";
import type { Amplifier, DetectorLayout } from "./amplifiers.js";
import { Desk } from "./desk.js";
import { MaskBit } from "./frame.js";
import { type ConstantLines, constantLines, type MissingFound, zeroIsImpossible } from "./missing.js";
import { type OverscanLevel, overscanLevel } from "./overscan.js";
import type { RawImage } from "./raw.js";
import { saturationLimit } from "./saturation.js";

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

export interface Assembled {
  name: string;
  nx: number;
  ny: number;
  /** ny × nx, e⁻; NaN where there is no value. */
  electrons: Float32Array;
  /** ny × nx, bits of MaskBit. */
  mask: Uint8Array;
  /** As in Frame. */
  memory?: Workbench;
  regions: Region[];
  layout: DetectorLayout;
  missing: MissingFound;
  nSaturated: number;
}

/** Takes the zero level off and multiplies by the gain. Saturation and missing values become mask bits.
 * Where there is neither overscan nor bias_level the pedestal stays in: the bias stack must take it off.
 * @param kernels the frame gets a memory of theirs, and they do the work. */
export function assemble(raw: RawImage, layout: DetectorLayout, kernels?: Kernels): Assembled {
  const levels = layout.amplifiers.map((amplifier) => overscanLevel(raw, amplifier));
  const { axis1, axis2 } = layout.geometry;
  const desk = Desk.for(raw, axis1 * axis2, kernels);
  const turned = layout.dispersionAxis === 2;
  const picture = turned ? desk.another() : desk;
  if (!isCovered(layout)) {
    picture.electrons.fill(Number.NaN);
    picture.mask.fill(MaskBit.missing);
  }
  const limit = saturationLimit(raw, layout);
  let nSaturated = 0;
  const missing: MissingFound = { nanPixels: 0, constantColumns: 0, constantRows: 0, zeroPixels: 0 };
  layout.amplifiers.forEach((amplifier, i) => {
    const { data, place, gain } = amplifier;
    const part: AmplifierCounts = {
      ...{ data: desk.data, stride: raw.nx, from: (data.y1 - 1) * raw.nx + data.x1 - 1 },
      ...{ ...sectionSize(data), limit },
      ...{ electrons: picture.electrons, mask: picture.mask },
      ...{ outStride: axis1, to: (place.y1 - 1) * axis1 + place.x1 - 1 },
    };
    const zeroIsMissing = zeroIsImpossible(levels[i]);
    const odd = desk.toElectrons(part, { ...zeroLevels(amplifier, levels[i]), gain, zeroIsMissing });
    if (odd.nSaturated > 0) desk.growSaturation(part);
    const constant = constantLines(raw, data, layout.saturationAdu);
    markLines(part, constant);
    nSaturated += odd.nSaturated;
    missing.nanPixels += odd.nWithoutValue;
    missing.zeroPixels += odd.nZero;
    missing.constantColumns += constant.columns.length;
    missing.constantRows += constant.rows.length;
  });
  if (turned) desk.turn(picture, axis1, axis2);
  const regions = layout.amplifiers.map((amplifier, i) => regionOf(amplifier, levels[i], turned));
  const [nx, ny] = turned ? [axis2, axis1] : [axis1, axis2];
  const { electrons, mask } = desk;
  const memory = desk.close();
  return {
    ...{ name: raw.name, nx, ny, electrons, mask, regions, layout, missing, nSaturated },
    ...(memory ? { memory } : {}),
  };
}

/** Whether the amplifiers' pixels, which do not overlap, fill the picture. */
function isCovered({ amplifiers, geometry }: DetectorLayout): boolean {
  const n = amplifiers.reduce((sum, { place }) => sum + sectionSize(place).nx * sectionSize(place).ny, 0);
  return n === geometry.axis1 * geometry.axis2;
}

function markLines(
  { electrons, mask, nx, ny, outStride, to }: AmplifierCounts,
  { columns, rows }: ConstantLines,
): void {
  const mark = (at: number) => {
    electrons[at] = Number.NaN;
    mask[at] |= MaskBit.missing;
  };
  for (const x of columns) for (let y = 0; y < ny; y++) mark(to + y * outStride + x);
  for (const y of rows) for (let x = 0; x < nx; x++) mark(to + y * outStride + x);
}

/** ADU, for each row or each column of the data section. */
function zeroLevels(amplifier: Amplifier, level: OverscanLevel | undefined) {
  const { ny } = sectionSize(amplifier.data);
  if (level === undefined) return { zero: new Float64Array(ny).fill(amplifier.biasLevelAdu ?? 0), zeroForRow: true };
  return { zero: level.level, zeroForRow: amplifier.levelFor === "rows" };
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
