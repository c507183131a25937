/** Where pixels end in wavelength, and where wavelengths lie in pixels.
 *
 * A pixel's edges are half way in x between its middle and the next ones': by the cubic through four middles,
 * λ(x + ½) = (−λ₋₁ + 9λ₀ + 9λ₁ − λ₂)/16, whose error, 3/128·λ'''', is below 1e-9 Å for any spectrograph's dispersion. */
import { CalibrationError } from "./errors.js";

/** Edges of a row's pixels: [nx + 1] Å, rising or falling as the row does; undefined when the row has no wavelengths.
 * `middles`: [nx], nx ≥ 4. `fibre`: from 1, for messages.
 * @throws CalibrationError when they do not rise, or fall, all along. */
export function pixelEdges(middles: Float64Array, fibre: number): Float64Array | undefined {
  const nx = middles.length;
  if (middles.every((value) => Number.isNaN(value))) return undefined;
  const sign = middles[nx - 1] > middles[0] ? 1 : -1;
  for (let x = 1; x < nx; x++) {
    if (sign * (middles[x] - middles[x - 1]) > 0) continue;
    throw new CalibrationError(
      `The wavelengths of fibre ${fibre} turn round or stop at column ${x + 1}; calibrate the frame again.`,
    );
  }
  const edges = new Float64Array(nx + 1);
  const through = (first: number, [a, b, c, d]: readonly number[]) =>
    a * middles[first] + b * middles[first + 1] + c * middles[first + 2] + d * middles[first + 3];
  for (let x = 2; x <= nx - 2; x++) edges[x] = through(x - 2, INSIDE);
  const last = nx - 4;
  edges[0] = through(0, OUTSIDE);
  edges[1] = through(0, BESIDE);
  edges[nx - 1] = through(last, [...BESIDE].reverse());
  edges[nx] = through(last, [...OUTSIDE].reverse());
  return edges;
}

/** Lagrange's weights for the middle of four points, half a step inside the first, and half a step before it. */
const INSIDE = [-1 / 16, 9 / 16, 9 / 16, -1 / 16];
const BESIDE = [5 / 16, 15 / 16, -5 / 16, 1 / 16];
const OUTSIDE = [35 / 16, -35 / 16, 21 / 16, -5 / 16];

/** The pixel coordinate (middles on whole numbers from 0) of each of `wavelengths`, which rise. Beyond the row's ends the
 * outermost pixel's width goes on. */
export function pixelPositions(edges: Float64Array, wavelengths: Float64Array): Float64Array {
  const nx = edges.length - 1;
  const rises = edges[nx] > edges[0];
  const positions = new Float64Array(wavelengths.length);
  let x = rises ? 0 : nx - 1;
  wavelengths.forEach((wavelength, i) => {
    if (rises) while (x < nx - 1 && wavelength >= edges[x + 1]) x++;
    else while (x > 0 && wavelength >= edges[x]) x--;
    positions[i] = x - 0.5 + (wavelength - edges[x]) / (edges[x + 1] - edges[x]);
  });
  return positions;
}
