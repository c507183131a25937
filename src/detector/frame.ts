/** A frame: one exposure after detector correction, in electrons, dispersion along x.
 *
 * Pixels count from 0 with centres on whole numbers; images are row-major, index = y · nx + x. */
import type { Header } from "../fits/header.js";
import type { Workbench } from "../kernels/module.js";
import type { NoiseIngredients } from "../reference/variance.js";

export { MaskBit } from "../reference/bits.js";
export type { NoiseIngredients } from "../reference/variance.js";

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
  /** The kernel memory in which `electrons` and `mask` lie, with room behind them; absent when they are arrays of their
   * own. A frame made from another may have replaced one of them: only what has this memory's buffer lies in it. */
  memory?: Workbench;
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
