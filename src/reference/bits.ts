/** Bits of masks and flags. Written so that AssemblyScript reads the same file: numbers named once for both sides. */

/** Why a pixel takes no part in a fit. The detector sets the first three, the extraction the others. */
export enum MaskBit {
  bad = 1,
  saturated = 2,
  /** NaN, BLANK, a dropped readout, or outside the detector: there is no value. */
  missing = 4,
  /** Rejected as a cosmic ray. */
  cosmic = 8,
  /** Brighter than the lower threshold: goes too when a neighbouring pixel was rejected. */
  suspect = 16,
  /** Went with a rejected neighbour. */
  grown = 32,
}

/** What to know of a spectrum's point. Up to 128 the value stands; from 256 on it is not to be trusted. */
export enum Flag {
  cosmicRay = 1,
  badPixel = 2,
  neighbourSaturated = 4,
  extrapolated = 8,
  varianceUnsettled = 16,
  saturated = 256,
  weightLost = 512,
  dead = 1024,
  outside = 2048,
  noWavelength = 4096,
}
