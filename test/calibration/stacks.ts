/** Frames of one field with known light and noise, as products in memory: Poisson numbers of the light, read noise of an extraction,
 * and a variance that follows each frame's own value, as a weighted extraction's does. */
import type { PixelWavelengths, SpectraProduct } from "../../src/calibration/spectraProduct.js";
import type { Spectra } from "../../src/extraction/spectra.js";
import { Header } from "../../src/fits/header.js";
import { poisson } from "../../src/random/poisson.js";
import { openStream } from "../../src/random/streams.js";
import { spectraOf } from "./products.js";

export interface FrameTruth {
  scale?: number;
  seconds?: number;
  /** Factor of a fibre's light at a column. */
  own?: (k: number, x: number) => number;
  /** Pixels by which its light lies at higher columns. */
  shift?: number;
  /** Where: e⁻ on top. */
  hits?: [k: number, x: number, electrons: number][];
  /** Light in place of the field's. */
  light?: (k: number, x: number) => number;
  sky?: number;
}

export const READ_VARIANCE = 25;

/** @param light e⁻ of the first frame, at any x. */
export function frameOf(
  [nFibre, nx]: [number, number],
  light: (k: number, x: number) => number,
  seed: string,
  truth: FrameTruth = {},
): SpectraProduct {
  const { scale = 1, seconds = 900 * scale, own = () => 1, shift = 0, hits = [], sky = 0 } = truth;
  const stream = openStream(77, seed);
  const spectra = spectraOf(nFibre, nx, (k, x) => {
    const expected = scale * own(k, x) * (truth.light ?? light)(k, x - shift) + sky;
    const hit = hits.find(([hk, hx]) => hk === k && hx === x)?.[2] ?? 0;
    return poisson(stream, expected) + Math.sqrt(READ_VARIANCE) * stream.normal() + hit;
  });
  spectra.variance = spectra.flux.map((value) => READ_VARIANCE + Math.max(value, 0));
  spectra.flux = spectra.flux.map((value) => value - sky);
  return productOf(seed, spectra, { seconds, ...(sky > 0 ? { sky } : {}) });
}

export function productOf(
  name: string,
  spectra: Spectra,
  { seconds = 900, sky, wavelengths }: { seconds?: number; sky?: number; wavelengths?: PixelWavelengths } = {},
): SpectraProduct {
  const cards = [
    { keyword: "EXPTIME", value: seconds, comment: "" },
    { keyword: "TRAMGEOM", value: "0123", comment: "" },
  ];
  return {
    ...{ name, checksum: name, spectra, rebinned: false, targets: [], primaryHeader: new Header(cards) },
    positions: { nRows: 0, columns: [], header: new Header(), primaryHeader: new Header(), hduIndex: 8, warnings: [] },
    ...(sky === undefined ? {} : { sky: new Float32Array(spectra.flux.length).fill(sky) }),
    ...(wavelengths === undefined ? {} : { wavelengths }),
  };
}

export const mean = (values: ArrayLike<number>) => Array.from(values).reduce((a, b) => a + b, 0) / values.length;
