/** Spectra: one row a slit position, unlit and dead ones too; never renumbered. */

import { Flag } from "../reference/bits.js";
import type { ExtractionOutput, Method } from "../reference/extract.js";

export { Flag } from "../reference/bits.js";
export type { Method } from "../reference/extract.js";

/** A point with any of these bits is not to be trusted. */
export const UNUSABLE = Flag.saturated | Flag.weightLost | Flag.dead | Flag.outside | Flag.noWavelength;

/** Images nFibre × nx, index = fibre · nx + x. NaN where there is no value. */
export interface Spectra extends ExtractionOutput {
  nFibre: number;
  nx: number;
  method: Method;
  crosstalkCorrected: boolean;
}
