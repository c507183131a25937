/** A frame: one exposure after detector correction, in electrons, dispersion along x.
 *
 * Pixels count from 0 with centres on whole numbers; images are row-major, index = y · nx + x. */
import type { Header } from "../fits/header.js";

/** Bits of `Frame.mask`. A pixel with any bit set takes no part in a fit. */
export const MaskBit = {
  bad: 1,
  saturated: 2,
  /** NaN, BLANK or a dropped readout: there is no value. */
  missing: 4,
} as const;

/** Variance is never taken from the data. Its ingredients, for a pixel whose model is m electrons:
 *
 *     v = fixed + max(m, 0) / r + responseRelativeVariance · m²      e⁻²
 *
 * fixed = (readNoise² + dark·t) / r² + variance of bias and dark stacks; r the pixel response. */
export interface NoiseIngredients {
  /** ny: which row of `fixedVariance` holds for this row of the frame. */
  bandOfRow: Uint8Array;
  /** nBand × nx, e⁻²: used where no calibration image enters. */
  fixedVariance: Float32Array;
  /** ny × nx, e⁻²: replaces `fixedVariance` when present. */
  fixedVarianceImage?: Float32Array;
  /** ny × nx: 1/r; absent means 1. */
  inverseResponse?: Float32Array;
  /** ny × nx: (σ_r / r)²; absent means 0. */
  responseRelativeVariance?: Float32Array;
}

/** Which pixels of which readout a frame is made of; frames and tramlines only go together when this agrees. */
export interface DetectorGeometry {
  /** Size of the assembled frame as it lies in the file, before any turn: FITS axes 1 and 2. */
  axis1: number;
  axis2: number;
  /** FITS axis along which wavelength runs. */
  dispersionAxis: 1 | 2;
  /** FITS sections of the file that hold data, and where they go, one an amplifier, in file order. */
  data: string[];
  place: string[];
  binning: [number, number];
  /** Short hexadecimal digest of all of the above. */
  digest: string;
}

export interface Frame {
  /** What to call it in messages: the file's name. */
  name: string;
  nx: number;
  ny: number;
  /** ny × nx, e⁻; NaN where there is no value. */
  electrons: Float32Array;
  /** ny × nx, bits of MaskBit. */
  mask: Uint8Array;
  noise: NoiseIngredients;
  geometry: DetectorGeometry;
  exposureSeconds: number;
  /** The primary header's cards, carried to the products. */
  header: Header;
  /** What was assumed for want of better knowledge, one sentence each, for the user to read. */
  assumptions: string[];
  /** What looks wrong, one sentence each. */
  warnings: string[];
}
