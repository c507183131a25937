/** What must hold of an extraction's input before kernels, which check nothing, get to work on it. */
import type { ExtractionStart } from "../reference/extract.js";

/** `outputRow`: [nFibre] row of the images for each fibre, of `nSlit`.
 * @throws RangeError when lengths do not fit, a width is none, or a row is outside the slit. */
export function checkInput(input: ExtractionStart, outputRow: Int32Array, nSlit: number): void {
  const { nx, ny, nFibre, noise, background } = input;
  const lengths: [string, ArrayLike<number> | undefined, number][] = [
    ["electrons", input.electrons, nx * ny],
    ["mask", input.mask, nx * ny],
    ["rejected", input.rejected, nx * ny],
    ["bandOfRow", noise.bandOfRow, ny],
    ["fixedVarianceImage", noise.fixedVarianceImage, nx * ny],
    ["inverseResponse", noise.inverseResponse, nx * ny],
    ["responseRelativeVariance", noise.responseRelativeVariance, nx * ny],
    ["trace", input.trace, nFibre * input.nTrace],
    ["width", input.width, nFibre * input.nWidth],
    ["seen", input.seen, 2 * nFibre],
    ["outputRow", outputRow, nFibre],
    ["background", background.coefficients, background.nX * background.nY],
  ];
  for (const [name, values, length] of lengths) {
    if (values !== undefined && values.length !== length) {
      throw new RangeError(`${name} holds ${values.length} numbers, but this extraction needs ${length}.`);
    }
  }
  const nBand = noise.fixedVariance.length / nx;
  if (!Number.isInteger(nBand) || noise.bandOfRow.some((band) => band >= nBand)) {
    throw new RangeError(`fixedVariance holds ${nBand} bands of ${nx} columns, fewer than bandOfRow names.`);
  }
  for (let k = 0; k < nFibre; k++) {
    const width = input.width.subarray(k * input.nWidth, (k + 1) * input.nWidth);
    if (!(width.slice(1).reduce((least, c) => least - Math.abs(c), width[0]) > 0)) {
      throw new RangeError(`The width of fibre ${k} of this extraction is not above 0 everywhere.`);
    }
  }
  if (outputRow.some((row) => row < 0 || row >= nSlit)) {
    throw new RangeError(`outputRow names a row outside the ${nSlit} of the slit.`);
  }
}
