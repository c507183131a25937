/** The bad-pixel image: as large as the assembled frame, not 0 (or NaN) where a pixel is not to be used. */
import { DetectorError } from "./detectorError.js";
import { type DetectorGeometry, MaskBit } from "./frame.js";

/** Size and HISTORY of the image, and either its values or the numbers of its bad pixels. */
export type BadPixelImage = {
  name: string;
  nx: number;
  ny: number;
  /** Stands for the HDU in a product's HISTORY. */
  checksum?: string;
} & ({ data: Float32Array | Float64Array } | { pixels: readonly number[] });

/** Sets MaskBit.bad in `mask` [ny × nx of the turned frame] where the image says so.
 * @throws DetectorError when its size is not the assembled frame's, or over half of it is bad. */
export function markBadPixels(mask: Uint8Array, image: BadPixelImage, geometry: DetectorGeometry): void {
  const { axis1, axis2, dispersionAxis } = geometry;
  if (image.nx !== axis1 || image.ny !== axis2) {
    throw new DetectorError(
      `${image.name}: ${image.nx} × ${image.ny} pixels, but the assembled frame has ${axis1} × ${axis2}; a bad-pixel image shows the frame without overscan.`,
    );
  }
  const bad = badPixelNumbers(image);
  if (2 * bad.length > mask.length) {
    throw new DetectorError(
      `${image.name}: ${bad.length} of ${mask.length} pixels are not 0 and so bad; in a bad-pixel image good pixels are 0.`,
    );
  }
  for (const at of bad) {
    const turned = (at % axis1) * axis2 + Math.floor(at / axis1);
    mask[dispersionAxis === 1 ? at : turned] |= MaskBit.bad;
  }
}

/** Numbers, y · nx + x of the image, of the bad pixels; rising. */
export function badPixelNumbers(image: BadPixelImage): readonly number[] {
  return "pixels" in image ? image.pixels : badAmong(image.data);
}

function badAmong(data: Float32Array | Float64Array): number[] {
  const bad: number[] = [];
  for (let at = 0; at < data.length; at++) if (data[at] !== 0) bad.push(at);
  return bad;
}

/** Mask [ny × nx of the turned frame] of the bad pixels alone. @throws DetectorError as `markBadPixels`. */
export function badPixelMask(image: BadPixelImage, geometry: DetectorGeometry): Uint8Array {
  const mask = new Uint8Array(geometry.axis1 * geometry.axis2);
  markBadPixels(mask, image, geometry);
  return mask;
}
