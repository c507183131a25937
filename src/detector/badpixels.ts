/** The bad-pixel image: as large as the assembled frame, not 0 (or NaN) where a pixel is not to be used. */
import { DetectorError } from "./detectorError.js";
import { type DetectorGeometry, MaskBit } from "./frame.js";
import type { RawImage } from "./raw.js";

/** Mask [ny × nx of the turned frame] with MaskBit.bad where the image says so.
 * @throws DetectorError when its size is not the assembled frame's, or over half of it is bad. */
export function badPixelMask(image: RawImage, geometry: DetectorGeometry): Uint8Array {
  const { axis1, axis2, dispersionAxis } = geometry;
  if (image.nx !== axis1 || image.ny !== axis2) {
    throw new DetectorError(
      `${image.name}: ${image.nx} × ${image.ny} pixels, but the assembled frame has ${axis1} × ${axis2}; a bad-pixel image shows the frame without overscan.`,
    );
  }
  const mask = new Uint8Array(axis1 * axis2);
  let nBad = 0;
  for (let j = 0; j < axis2; j++) {
    for (let i = 0; i < axis1; i++) {
      if (image.data[j * axis1 + i] === 0) continue;
      mask[dispersionAxis === 1 ? j * axis1 + i : i * axis2 + j] = MaskBit.bad;
      nBad++;
    }
  }
  if (2 * nBad > mask.length) {
    throw new DetectorError(
      `${image.name}: ${nBad} of ${mask.length} pixels are not 0 and so bad; in a bad-pixel image good pixels are 0.`,
    );
  }
  return mask;
}
