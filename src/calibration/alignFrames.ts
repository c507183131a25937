/** Frames of one field column by column: as they are where their wavelengths agree, otherwise with the light of each pixel moved
 * to the first frame's pixels.
 *
 * Frames that agree within a small part of a pixel are left alone: moving them would cost sharpness and independent errors
 * and gain nothing. Those that do not are rebinned onto the first frame's pixels, fibre by fibre, by parabolas (overlaps.ts);
 * from then on neighbouring columns share noise, and the covariance is carried. */
import type { Spectra } from "../extraction/spectra.js";
import { type Overlaps, overlaps, rebinCovariance, rebinRow } from "./overlaps.js";
import { pixelEdges, pixelPositions } from "./pixelEdges.js";
import { binFlags, usablePixels } from "./rebin.js";
import type { SpectraProduct } from "./spectraProduct.js";

export interface AlignedFrame {
  name: string;
  /** EXPTIME; NaN when the header does not say. */
  exposureSeconds: number;
  spectra: Spectra;
  /** nFibre × nx: 1 where the value is to be trusted. */
  usable: Uint8Array;
  /** Variance of the column's light before it was moved, which is what the frame's weight goes by; `spectra.variance` is smaller
   * where light was moved, since neighbouring columns then hold part of it. */
  information: Float32Array | Float64Array;
  columnCovariance?: Float64Array;
  sky?: Float32Array | Float64Array;
  /** Largest difference from the first frame's columns, pixels; NaN without wavelengths. */
  apart: number;
  moved: boolean;
}

/** Share of a column without usable light up to which the rest makes good for it. */
const mostLost = 0.3;

/** @param tolerance pixels up to which frames are combined column by column.
 * @throws CalibrationError for wavelengths that turn round. */
export function alignFrames(products: SpectraProduct[], tolerance: number): AlignedFrame[] {
  const edges = products[0].wavelengths && allEdges(products[0]);
  return products.map((product, i) => {
    const places = edges && i > 0 ? placesIn(product, edges) : undefined;
    const apart = places === undefined ? (edges ? 0 : Number.NaN) : furthest(places);
    return places !== undefined && apart > tolerance ? movedFrame(product, places, apart) : asItIs(product, apart);
  });
}

function allEdges({ spectra: { nFibre, nx }, wavelengths }: SpectraProduct): (Float64Array | undefined)[] {
  return Array.from({ length: nFibre }, (_, k) => pixelEdges(wavelengths!.image.subarray(k * nx, (k + 1) * nx), k + 1));
}

/** Where the first frame's pixel edges lie among this one's columns: [nx + 1] a fibre; undefined where one has no wavelengths. */
function placesIn(product: SpectraProduct, first: (Float64Array | undefined)[]): (Float64Array | undefined)[] {
  return allEdges(product).map((own, k) => {
    const wanted = first[k];
    if (own === undefined || wanted === undefined) return undefined;
    const falls = wanted[wanted.length - 1] < wanted[0];
    const rising = falls ? wanted.slice().reverse() : wanted;
    const places = pixelPositions(own, rising);
    return falls ? places.reverse() : places;
  });
}

function furthest(places: (Float64Array | undefined)[]): number {
  let most = 0;
  for (const row of places) {
    row?.forEach((place, i) => {
      most = Math.max(most, Math.abs(place - (i - 0.5)));
    });
  }
  return most;
}

function asItIs(product: SpectraProduct, apart: number): AlignedFrame {
  const { spectra, sky } = product;
  return {
    ...common(product),
    ...{ spectra, apart, moved: false, information: spectra.variance, usable: allUsable(spectra) },
    ...(sky ? { sky } : {}),
  };
}

function common({ name, primaryHeader }: SpectraProduct) {
  const seconds = primaryHeader.get("EXPTIME");
  return { name, exposureSeconds: typeof seconds === "number" && seconds > 0 ? seconds : Number.NaN };
}

function allUsable(spectra: Spectra): Uint8Array {
  const usable = new Uint8Array(spectra.flux.length);
  for (let k = 0; k < spectra.nFibre; k++) usable.set(usablePixels(spectra, k), k * spectra.nx);
  return usable;
}

function movedFrame(product: SpectraProduct, places: (Float64Array | undefined)[], apart: number): AlignedFrame {
  const { spectra, sky } = product;
  const { nFibre, nx } = spectra;
  const copy = (image: Float32Array | Float64Array) => Float64Array.from(image);
  const out: Spectra = {
    ...spectra,
    ...{ flux: copy(spectra.flux), variance: copy(spectra.variance), background: copy(spectra.background) },
    ...{ neighbourCovariance: copy(spectra.neighbourCovariance), flags: spectra.flags.slice() },
  };
  const information = copy(spectra.variance);
  const columnCovariance = new Float64Array(nFibre * nx);
  const movedSky = sky && copy(sky);
  let above: Overlaps | undefined;
  places.forEach((positions, k) => {
    if (positions === undefined) {
      above = undefined;
      return;
    }
    const [from, to] = [k * nx, (k + 1) * nx];
    const usable = usablePixels(spectra, k);
    const rows = overlaps(positions, usable, "parabolic", mostLost);
    const variance = spectra.variance.subarray(from, to);
    out.flux.set(rebinRow(rows, spectra.flux.subarray(from, to)), from);
    out.variance.set(rebinCovariance(rows, rows, 0, variance), from);
    out.background.set(rebinRow(rows, spectra.background.subarray(from, to)), from);
    out.flags.set(binFlags(rows, positions, usable, spectra.flags.subarray(from, to)), from);
    information.set(rebinRow(rows, variance), from);
    columnCovariance.set(rebinCovariance(rows, rows, 1, variance), from);
    if (sky && movedSky) movedSky.set(rebinRow(rows, sky.subarray(from, to)), from);
    if (above !== undefined) {
      const shared = spectra.neighbourCovariance.subarray(from - nx, from);
      out.neighbourCovariance.set(rebinCovariance(above, rows, 0, shared), from - nx);
    }
    above = rows;
  });
  return {
    ...common(product),
    ...{ spectra: out, usable: allUsable(out), information, columnCovariance, apart, moved: true },
    ...(movedSky ? { sky: movedSky } : {}),
  };
}
