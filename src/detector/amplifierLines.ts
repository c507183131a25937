/** An amplifier's counts above its zero level, as lines along dispersion, all of them or an even choice. */
import type { Amplifier } from "./amplifiers.js";
import { amplifierSize } from "./amplifiers.js";
import { overscanLevel } from "./overscan.js";
import type { RawImage } from "./raw.js";

/** Lines are chosen in runs of so many: single ones at a step might all fall between the fibres. */
const RUN = 24;

export interface AmplifierLines {
  /** nLine × length, ADU above zero; NaN where there is no value. Line k and k + 1 are neighbours within a run. */
  values: Float64Array;
  nLine: number;
  length: number;
  /** Lines of one run. */
  run: number;
}

export interface LineChoice {
  /** Axis of the file along which the lines run. */
  axis: 1 | 2;
  /** ADU, taken off where there is no overscan. */
  pedestal?: number;
  /** ADU: what is above has no value. */
  ceiling?: number;
  /** About so many pixels, spread evenly over the amplifier. */
  mostPixels?: number;
}

export function amplifierLines(raw: RawImage, amplifier: Amplifier, choice: LineChoice): AmplifierLines {
  const { axis, pedestal = 0, ceiling = Number.POSITIVE_INFINITY, mostPixels = Number.POSITIVE_INFINITY } = choice;
  const level = overscanLevel(raw, amplifier);
  const { data, levelFor } = amplifier;
  const { nx, ny } = amplifierSize(amplifier);
  const [length, nAll] = axis === 1 ? [nx, ny] : [ny, nx];
  const lines = chosenLines(nAll, Math.ceil(mostPixels / length));
  const values = new Float64Array(lines.length * length);
  lines.forEach((line, k) => {
    for (let i = 0; i < length; i++) {
      const [x, y] = axis === 1 ? [i, line] : [line, i];
      const value = raw.data[(data.y1 - 1 + y) * raw.nx + data.x1 - 1 + x];
      const zero = level ? level.level[levelFor === "rows" ? y : x] : pedestal;
      values[k * length + i] = value <= ceiling ? value - zero : Number.NaN;
    }
  });
  return { values, nLine: lines.length, length, run: lines.length === nAll ? nAll : RUN };
}

function chosenLines(nAll: number, most: number): number[] {
  const nRun = Math.max(1, Math.ceil(most / RUN));
  if (nRun * RUN >= nAll) return Array.from({ length: nAll }, (_, i) => i);
  return Array.from({ length: nRun * RUN }, (_, k) => {
    const run = Math.floor(k / RUN);
    return Math.floor((run * (nAll - RUN)) / Math.max(1, nRun - 1)) + (k % RUN);
  });
}
