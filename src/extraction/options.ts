/** What can be asked of an extraction. */

import type { Method, SmoothBackground } from "../reference/extract.js";
import type { OneOff } from "../tramlines/oneOff.js";
import type { Shift } from "../tramlines/shift.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import type { PrecisionChoice } from "./precision.js";

export interface ExtractionOptions {
  /** Default joint. */
  method?: Method;
  /** Give back to each fibre what boxcar or optimal let its neighbours take; joint always does. Default true. */
  crosstalk?: boolean;
  /** Type of the kernels' numbers. Default f64; auto takes f32, which is faster, wherever it costs next to nothing. */
  precision?: PrecisionChoice;
  /** Reject cosmic rays. Default true. */
  cosmicRays?: boolean;
  /** Excess over noise, in σ, from which on a pixel is rejected. Default 5. */
  kappa?: number;
  /** The same for pixels beside a rejected one. Default 2.5. */
  growKappa?: number;
  /** Half of the boxcar's aperture, pixels. Default half of the smallest pitch, at most the profile's reach. */
  halfAperture?: number;
  /** Take off a smooth background seen between the fibres. Default true. */
  background?: boolean;
  /** What `adaptTramlines` found for this very frame and these tramlines: measured once for several extractions. */
  adapted?: Adapted;
  /** Measure where the frame's light sits against the tramlines, and extract it there. Default true. */
  shift?: boolean;
  /** Refuse a frame whose light does not tell that its fibres are named rightly. Default true. Without it a frame that moved
   * by one fibre since the flat gives every spectrum another fibre's number, in silence. */
  checkNames?: boolean;
  /** Refine a measured profile on the frame itself. Default true. */
  refine?: boolean;
  /** ny × nx, not 0 where a cosmic ray is known to have hit: those pixels are left out from the start. */
  knownHits?: Uint8Array;
  /** Called with the share of columns done, 0 to 1. */
  onProgress?: (share: number) => void;
}

/** A flat's tramlines and profile made a frame's own. */
export interface Adapted {
  tramlines: Tramlines;
  shift: Shift | null;
  /** Null when no shift was measured. */
  oneOff: OneOff | null;
  refined: boolean;
  /** A first fit of the background, where one was made: a start for the next. */
  background?: SmoothBackground | undefined;
  warnings: string[];
}
