/** Breaks in wavelength that lie a given number of pixels apart, for splines through fibres that each see a wavelength in
 * another column. The fibre in the middle of those with a solution says how wide a pixel is. */

/** Rising, from the least wavelength of the fibres to the greatest. `wavelengths`: nFibre × nx Å, rising or falling along
 * x, NaN in rows without a solution; `fibres`: the rows that count, at least one with a solution; `step`: pixels. */
export function wavelengthBreaks(wavelengths: Float64Array, nx: number, fibres: number[], step: number): Float64Array {
  const known = fibres.filter(
    (k) => Number.isFinite(wavelengths[k * nx]) && Number.isFinite(wavelengths[k * nx + nx - 1]),
  );
  const ends = known.flatMap((k) => [wavelengths[k * nx], wavelengths[k * nx + nx - 1]]);
  const [least, greatest] = [Math.min(...ends), Math.max(...ends)];
  const middle = known[known.length >> 1] * nx;
  const at = (x: number) => wavelengthBetween(wavelengths, middle, nx, x);
  const sign = at(nx - 1) > at(0) ? 1 : -1;
  const start = sign > 0 ? 0 : nx - 1;
  // Columns of the middle fibre, counted along rising wavelength; the first pixels' width goes on beyond them.
  const wavelength = (u: number) => at(start + sign * u);
  const breaks: number[] = [];
  let u = -Math.ceil((at(start) - least) / ((wavelength(1) - wavelength(0)) * step)) * step;
  for (; wavelength(u) < greatest; u += step) breaks.push(wavelength(u));
  breaks.push(wavelength(u));
  return Float64Array.from(breaks);
}

/** Linear between columns and on beyond the ends. */
function wavelengthBetween(wavelengths: Float64Array, row: number, nx: number, x: number): number {
  const low = Math.min(Math.max(Math.floor(x), 0), nx - 2);
  const here = wavelengths[row + low];
  return here + (x - low) * (wavelengths[row + low + 1] - here);
}

/** Where a fibre sees a wavelength, by linear interpolation between columns; NaN beyond its ends. `row`: its first index. */
export function columnBetween(wavelengths: Float64Array, row: number, nx: number, wavelength: number): number {
  const rising = wavelengths[row + nx - 1] > wavelengths[row];
  const before = (x: number) => (rising ? wavelengths[row + x] <= wavelength : wavelengths[row + x] >= wavelength);
  if (!before(0) || (before(nx - 1) && wavelengths[row + nx - 1] !== wavelength)) return Number.NaN;
  let [low, high] = [0, nx - 1];
  while (high - low > 1) {
    const middle = (low + high) >> 1;
    if (before(middle)) low = middle;
    else high = middle;
  }
  return low + (wavelength - wavelengths[row + low]) / (wavelengths[row + low + 1] - wavelengths[row + low]);
}
