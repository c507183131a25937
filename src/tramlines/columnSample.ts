/** Columns of a science frame, evenly spread, by which its shift, its fibres' names and its background are told: read once, and
 * fitted as often as need be. */
import type { Frame } from "../detector/frame.js";
import { ColumnSample, groupColumns } from "../kernels/columnFit.js";
import type { Kernels, Workbench } from "../kernels/module.js";
import { legendreValue } from "../reference/legendre.js";
import { linesOf, profileTable } from "./profileTable.js";
import type { Tramlines } from "./tramlines.js";

/** σ to which a Gaussian's light is followed. */
const gaussianReach = 5;
/** The same of a profile with wings, where nothing faint hangs on it. */
const nearReach = 8;

/** How many groups, and how many of them side by side: 4 × 4 columns are one line of the processor's cache. */
export interface SampleSize {
  nGroup: number;
  together: 1 | 2 | 4;
}

/** Groups of four columns, at most as many as the frame holds without overlap, with room for fits of all fibres of `tramlines`,
 * dead ones too. `wingReach`: σ to which wings are followed; further out they count as background. `memory`: the frame's own, to
 * work in until the sample is released. */
export function sampleColumns(
  kernels: Kernels,
  frame: Frame,
  tramlines: Tramlines,
  size: SampleSize,
  wingReach = nearReach,
  memory?: Workbench,
): ColumnSample {
  const lines = linesOf(tramlines, Array.from(tramlines.state.keys()));
  const { profile } = tramlines;
  const reach = profile.kind === "gaussian" ? gaussianReach : wingReach;
  let widest = 0;
  for (let k = 0; k < lines.nFibre; k++) {
    for (const t of [-1, 0, 1]) {
      widest = Math.max(widest, legendreValue(lines.width, t, k * lines.nWidth, lines.nWidth));
    }
  }
  const table = profileTable(kernels, profile);
  const halfWindow = Math.ceil(reach * widest + 0.5);
  return new ColumnSample(kernels, frame, firstColumns(frame.nx, size), lines, table, halfWindow, memory);
}

/** First columns of the groups, those side by side one after the other. */
function firstColumns(nx: number, { nGroup, together }: SampleSize): Int32Array {
  const columns = together * groupColumns;
  const n = Math.min(Math.ceil(nGroup / together), Math.floor(nx / columns));
  if (n < 2) return Int32Array.from({ length: Math.max(1, Math.floor(nx / groupColumns)) }, (_, i) => i * groupColumns);
  return Int32Array.from({ length: n * together }, (_, i) => {
    const place = Math.floor(((Math.floor(i / together) + 0.5) * nx) / n - columns / 2);
    // On a whole number of columns that start a line, where that leaves them apart.
    const aligned = nx / n >= 2 * columns ? place - (place % columns) : place;
    return aligned + (i % together) * groupColumns;
  });
}

/** Every `step`-th group of a sample. */
export function everyGroup(sample: ColumnSample, step: number): Int32Array {
  return Int32Array.from({ length: Math.ceil(sample.nGroup / step) }, (_, i) => i * step);
}
