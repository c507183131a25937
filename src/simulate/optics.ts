/** Where the light of each fibre falls: tramlines, widths, wavelengths. All exact Legendre series in the column, so that
 * the truth can be handed on as coefficients. */

import { openStream } from "../random/streams.js";
import { buildProfileTable, type ProfileTable } from "./profile.js";
import type { Scene, SceneExposure } from "./scene.js";
import { series, seriesOnColumns } from "./series.js";

export const TRACE_TERMS = 5;
export const SIGMA_TERMS = 3;
export const WAVE_TERMS = 4;
const SIGMA_PER_FWHM = 1 / (2 * Math.sqrt(2 * Math.LN2));

/** One row a slit position. */
export interface Optics {
  nx: number;
  ny: number;
  nFibre: number;
  /** nFibre, from 1. */
  block: Int32Array;
  lit: boolean[];
  sky: boolean[];
  /** nFibre: place on the slit, −1 to 1. */
  slitPlace: Float64Array;
  /** nFibre × TRACE_TERMS: centroid y(x), pixels from 0, for this exposure (its shift included). */
  traceLegendre: Float64Array;
  /** nFibre × SIGMA_TERMS: σ(x) of the core, pixels. */
  sigmaLegendre: Float64Array;
  /** nFibre × WAVE_TERMS: Å at x − dispersionShift. */
  waveLegendre: Float64Array;
  dispersionShift: number;
  /** nFibre × nx each. */
  trace: Float64Array;
  sigma: Float64Array;
  secondShare: Float64Array;
  wave: Float64Array;
  table: ProfileTable;
}

export function buildOptics(scene: Scene, exposure: SceneExposure): Optics {
  const [n1, n2] = scene.detector.size;
  const [nx, ny] = scene.detector.dispersion_axis === 1 ? [n1, n2] : [n2, n1];
  const { place, block } = layOutSlit(scene, ny);
  const nFibre = place.length;
  const middle = (place[0] + place[nFibre - 1]) / 2;
  const half = (place[nFibre - 1] - place[0]) / 2 || 1;
  const slitPlace = place.map((y) => (y - middle) / half);
  const traceLegendre = tramlineSeries(scene, place, slitPlace);
  shiftTramlines(traceLegendre, exposure, (ny - 1) / 2);
  const sigmaLegendre = widthSeries(scene, slitPlace);
  const waveLegendre = wavelengthSeries(scene, slitPlace, nx);
  return {
    nx,
    ny,
    nFibre,
    block,
    lit: Array.from(place, (_y, k) => !scene.slit.dead.includes(k + 1)),
    sky: Array.from(place, (_y, k) => scene.slit.sky.includes(k + 1)),
    slitPlace,
    traceLegendre,
    sigmaLegendre,
    waveLegendre,
    dispersionShift: exposure.dispersion_shift,
    trace: seriesOnColumns(traceLegendre, nFibre, TRACE_TERMS, nx),
    sigma: seriesOnColumns(sigmaLegendre, nFibre, SIGMA_TERMS, nx),
    secondShare: secondShares(scene, slitPlace, nx),
    wave: wavelengthsOnColumns(waveLegendre, nFibre, nx, exposure.dispersion_shift),
    table: profileTable(scene),
  };
}

/** Å of a fibre at any column, whole or not. */
export function wavelengthAt(optics: Optics, fibre: number, x: number): number {
  const t = (2 * (x - optics.dispersionShift)) / (optics.nx - 1) - 1;
  return series(optics.waveLegendre, fibre * WAVE_TERMS, WAVE_TERMS, t);
}

/** The column where a fibre sees this wavelength, by bisection; NaN when it lies over `margin` columns off the frame. */
export function columnOf(optics: Optics, fibre: number, wavelength: number, margin: number): number {
  let low = -margin;
  let high = optics.nx - 1 + margin;
  const rising = wavelengthAt(optics, fibre, high) > wavelengthAt(optics, fibre, low) ? 1 : -1;
  const above = (x: number) => rising * (wavelengthAt(optics, fibre, x) - wavelength) > 0;
  if (above(low) || !above(high)) return Number.NaN;
  for (let i = 0; i < 60; i++) {
    const middle = (low + high) / 2;
    if (above(middle)) high = middle;
    else low = middle;
  }
  return (low + high) / 2;
}

/** y of each fibre in the middle column, before its own jitter. */
function layOutSlit({ slit }: Scene, ny: number): { place: Float64Array; block: Int32Array } {
  const place: number[] = [];
  const block: number[] = [];
  let at = 0;
  for (const [b, n] of slit.blocks.entries()) {
    for (let i = 0; i < n; i++) {
      place.push(at);
      block.push(b + 1);
      at += slit.pitch;
    }
    at += typeof slit.gap === "number" ? slit.gap : (slit.gap[b] ?? 0);
  }
  const first = slit.first ?? (ny - 1 - place[place.length - 1]) / 2;
  return { place: Float64Array.from(place, (y) => y + first), block: Int32Array.from(block) };
}

function tramlineSeries({ tramlines, seed }: Scene, place: Float64Array, slitPlace: Float64Array): Float64Array {
  const own = openStream(seed, "tramlines");
  const coef = new Float64Array(place.length * TRACE_TERMS);
  for (let k = 0; k < place.length; k++) {
    const s = slitPlace[k];
    coef.set(
      [
        place[k] + tramlines.own_place * own.normal(),
        tramlines.tilt + tramlines.fan * s + tramlines.own_tilt * own.normal(),
        tramlines.bow + tramlines.bow_fan * s + tramlines.own_bow * own.normal(),
        tramlines.curl,
        tramlines.quartic,
      ],
      k * TRACE_TERMS,
    );
  }
  return coef;
}

/** y → y + shift + stretch · (y − middle): linear, so the series stay series. */
function shiftTramlines(coef: Float64Array, { shift, stretch }: SceneExposure, middle: number): void {
  for (let at = 0; at < coef.length; at++) {
    coef[at] *= 1 + stretch;
    if (at % TRACE_TERMS === 0) coef[at] += shift - stretch * middle;
  }
}

function widthSeries({ profile, seed }: Scene, slitPlace: Float64Array): Float64Array {
  const own = openStream(seed, "widths");
  const coef = new Float64Array(slitPlace.length * SIGMA_TERMS);
  for (const [k, s] of slitPlace.entries()) {
    const sigma = profile.fwhm * SIGMA_PER_FWHM * Math.max(0.3, 1 + profile.own_width * own.normal());
    coef.set(
      [sigma * (1 + profile.across * s + profile.across_bow * s * s), sigma * profile.tilt, sigma * profile.bow],
      k * SIGMA_TERMS,
    );
  }
  return coef;
}

function wavelengthSeries({ wavelength, seed }: Scene, slitPlace: Float64Array, nx: number): Float64Array {
  const own = openStream(seed, "wavelengths");
  const [first, last] = wavelength.range;
  const perPixel = (last - first) / (nx - 1);
  const coef = new Float64Array(slitPlace.length * WAVE_TERMS);
  for (const [k, s] of slitPlace.entries()) {
    const middle = (first + last) / 2 + wavelength.slit_bow * s * s + wavelength.own_place * perPixel * own.normal();
    coef.set([middle, (last - first) / 2, wavelength.curve, wavelength.cubic], k * WAVE_TERMS);
  }
  return coef;
}

function wavelengthsOnColumns(coef: Float64Array, nFibre: number, nx: number, dispersionShift: number): Float64Array {
  const out = new Float64Array(nFibre * nx);
  for (let i = 0; i < out.length; i++) {
    const t = (2 * ((i % nx) - dispersionShift)) / (nx - 1) - 1;
    out[i] = series(coef, Math.floor(i / nx) * WAVE_TERMS, WAVE_TERMS, t);
  }
  return out;
}

function secondShares({ profile }: Scene, slitPlace: Float64Array, nx: number): Float64Array {
  const out = new Float64Array(slitPlace.length * nx);
  for (let i = 0; i < out.length; i++) {
    const t = (2 * (i % nx)) / (nx - 1) - 1;
    const s = slitPlace[Math.floor(i / nx)];
    out[i] = profile.second_share * (1 + profile.second_tilt * t + profile.second_across * s);
  }
  return out;
}

function profileTable({ profile }: Scene): ProfileTable {
  const sigma = profile.fwhm * SIGMA_PER_FWHM;
  return buildProfileTable({
    secondShare: profile.second_share,
    secondWidth: profile.second_width,
    secondOffset: profile.second_offset,
    wingShare: profile.wing_share,
    wing: profile.wing,
    wingScale: profile.wing_scale / sigma,
    wingBeta: profile.wing_beta,
    // A bare Gaussian ends where nothing is left of it: 2e-23 beyond 10 σ.
    reach:
      profile.wing_share > 0
        ? profile.reach / sigma
        : Math.min(profile.reach / sigma, 10 * Math.max(1, profile.second_share > 0 ? profile.second_width : 1)),
  });
}
