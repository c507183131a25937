/** Header cards that tell the wavelength of every column (Greisen et al. 2006, A&A 446, 747, FITS WCS Paper III):
 *
 *     AWAV, WAVE          λ = CRVAL1 + CDELT1·(p − CRPIX1)                    in air, in vacuum
 *     AWAV-LOG, WAVE-LOG  λ = CRVAL1 · exp(CDELT1·(p − CRPIX1) / CRVAL1)      its equation 5
 *
 * p counts columns from 1. The second axis counts slit positions from 1. */
import type { Card } from "./header.js";

/** `start`: Å in the middle of the first column; `step`: Å per column, or, `log`, in ln λ. */
export function spectralCards(medium: "air" | "vacuum", log: boolean, start: number, step: number): Card[] {
  const type = `${medium === "air" ? "AWAV" : "WAVE"}${log ? "-LOG" : ""}`;
  const inWhat = medium === "air" ? "in air" : "in vacuum";
  return [
    { keyword: "WCSAXES", value: 2, comment: "" },
    { keyword: "CTYPE1", value: type, comment: `wavelength ${inWhat}${log ? ", logarithmic" : ""}` },
    { keyword: "CUNIT1", value: "Angstrom", comment: "" },
    { keyword: "CRPIX1", value: 1, comment: "column, from 1" },
    { keyword: "CRVAL1", value: start, comment: "[Angstrom] in the middle of that column" },
    { keyword: "CDELT1", value: log ? start * step : step, comment: "[Angstrom] per column there" },
    { keyword: "CTYPE2", value: "FIBRE", comment: "slit position, from 1" },
    { keyword: "CRPIX2", value: 1, comment: "" },
    { keyword: "CRVAL2", value: 1, comment: "" },
    { keyword: "CDELT2", value: 1, comment: "" },
    { keyword: "SPECSYS", value: "TOPOCENT", comment: "as the observer saw it" },
  ];
}
