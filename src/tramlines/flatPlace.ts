/** Where a flat's light lies, and how it is spread, against another flat's of the same readout: two numbers a frame and a
 * coarse map, from the pixels alone, before anything is traced.
 *
 *     f(y) ≈ a·f₀(y) + b·f₀′(y),   shift δ = −b / a            pixels along y, for shifts well below a pixel
 *
 * by least squares over all rows of a sample of columns; f₀′ from five pixels (Abramowitz & Stegun 25.3.6), which is some
 * per cent too small for fibres of 2.5 px FWHM, so that δ comes out as much too large. */

import { medianOf, quantileOfSorted, sortedFinite } from "../detector/clip.js";
import type { Frame } from "../detector/frame.js";
import { TraceError } from "./errors.js";

/** Columns that are looked at, about. */
const COLUMNS = 64;
const CELLS = 8;
/** Of the column's brightest cell: below that a cell lies between blocks or beyond the slit. */
const LIT_SHARE = 0.3;
/** A mean of flats that differ by less is as sharp as each: it adds 0.05²/2 px² at most to a profile's variance, 0.15 % for a
 * FWHM of 2.2 px, and no profile is known better than to 0.2 %. */
const SAME_PLACE_PIXELS = 0.05;
/** Lamps drift; what differs by more, in a twentieth of the cells, is another light. */
const SAME_SPREAD = 0.15;
const CELLS_THAT_TELL = 0.05;

export interface FlatPlace {
  /** px, against the reference. */
  shift: number;
  /** Light over the reference's, 8 × 8 cells; NaN where that has little. */
  spread: Float64Array;
}

/** Medians over columns and over what columns have in a cell, so that hits do not matter. */
export function placeAgainst(reference: Frame, frame: Frame): FlatPlace {
  const { nx, ny, electrons: first } = reference;
  const { electrons } = frame;
  const shifts: number[] = [];
  const ratios: number[][] = Array.from({ length: CELLS * CELLS }, () => []);
  const step = Math.max(1, Math.floor(nx / COLUMNS));
  for (let x = step >> 1; x < nx; x += step) {
    const sums = { ff: 0, fd: 0, dd: 0, gf: 0, gd: 0 };
    const light = new Float64Array(2 * CELLS);
    for (let y = 2; y < ny - 2; y++) {
      const at = y * nx + x;
      const slope = (8 * (first[at + nx] - first[at - nx]) - (first[at + 2 * nx] - first[at - 2 * nx])) / 12;
      const [f, g] = [first[at], electrons[at]];
      // NaN anywhere near keeps the pixel out, as do masks.
      if (frame.mask[at] !== 0 || reference.mask[at] !== 0 || !Number.isFinite(slope * f * g)) continue;
      sums.ff += f * f;
      sums.fd += f * slope;
      sums.dd += slope * slope;
      sums.gf += g * f;
      sums.gd += g * slope;
      const part = 2 * Math.floor((CELLS * y) / ny);
      light[part] += f;
      light[part + 1] += g;
    }
    const { ff, fd, dd, gf, gd } = sums;
    shifts.push(-(gd * ff - gf * fd) / (gf * dd - gd * fd));
    const lit = LIT_SHARE * Math.max(...light.filter((_, j) => j % 2 === 0));
    for (let j = 0; j < CELLS; j++) {
      if (light[2 * j] > lit) ratios[j * CELLS + Math.floor((CELLS * x) / nx)].push(light[2 * j + 1] / light[2 * j]);
    }
  }
  // A hit may light a dark cell in one column, never in most of them.
  const most = shifts.length / CELLS / 2;
  const spread = Float64Array.from(ratios, (list) => (list.length > most ? medianOf(list) : Number.NaN));
  return { shift: medianOf(shifts), spread };
}

/** Of each flat why it does not belong to the others, in words that follow its name. The largest group of flats at one place
 * stays, the first of equals; of two flats nothing is said.
 * @throws TraceError when half of them or more differ in how their light is spread. */
export function flatsApart(places: FlatPlace[]): (string | undefined)[] {
  if (places.length < 3) return places.map(() => undefined);
  const common = places[0].spread.map((_, c) => medianOf(places.map(({ spread }) => spread[c])));
  const others = places.map(({ spread }) => {
    const ratio = spread.map((value, c) => value / common[c]);
    const level = medianOf(ratio);
    const off = sortedFinite(ratio.map((value) => Math.abs(value / level - 1)));
    const reached = quantileOfSorted(off, 1 - CELLS_THAT_TELL);
    if (!(reached > SAME_SPREAD)) return undefined;
    return `spreads its light over the detector otherwise than the other flats, by over ${Math.round(100 * reached)} % in places`;
  });
  const nOther = others.filter((reason) => reason !== undefined).length;
  if (2 * nOther >= places.length) {
    throw new TraceError(
      `${nOther} of the ${places.length} fibre flats spread their light over the detector otherwise than the rest, too many to tell which are right; give flats of one lamp.`,
    );
  }
  const shifts = places.map(({ shift }, i) => (others[i] === undefined ? shift : Number.NaN));
  const near = (i: number) => shifts.filter((shift) => Math.abs(shift - shifts[i]) <= SAME_PLACE_PIXELS);
  let best = 0;
  shifts.forEach((_, i) => {
    if (near(i).length > near(best).length) best = i;
  });
  const middle = medianOf(near(best));
  return places.map(({ shift }, i) => {
    if (others[i] !== undefined || Math.abs(shift - shifts[best]) <= SAME_PLACE_PIXELS) return others[i];
    return `has its fibres ${Math.abs(shift - middle).toFixed(2)} px from those of the flats that are used, and a mean of both would have broader profiles than either`;
  });
}

/** What to say of two flats, of which neither can be left out for the other. */
export function pairApart(names: string[], places: FlatPlace[]): string[] {
  if (places.length !== 2) return [];
  const shift = Math.abs(places[1].shift - places[0].shift);
  if (!(shift > 4 * SAME_PLACE_PIXELS)) return [];
  return [
    `${names[1]}: its fibres lie ${shift.toFixed(2)} px from those of ${names[0]}, so that the mean of both has broader profiles than either; trace one of them alone, or take a third.`,
  ];
}
