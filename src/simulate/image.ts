/** From spectra to the light that reaches each pixel: fibres spread over their profiles, and scattered light. */
import type { Optics } from "./optics.js";
import { profileReachPixels, profileWeights } from "./profile.js";

/** ny × nx, e⁻: Σ_fibres flux × profile. */
export function spreadFibres(optics: Optics, flux: Float64Array): Float64Array {
  const { nx, ny, nFibre } = optics;
  // Column after column, so that a fibre's pixels in one column lie side by side; turned at the end.
  const byColumn = new Float64Array(nx * ny);
  const weights = new Float64Array(ny);
  for (let k = 0; k < nFibre; k++) {
    for (let x = 0; x < nx; x++) {
      const i = k * nx + x;
      if (flux[i] === 0) continue;
      const reach = profileReachPixels(optics.table, optics.sigma[i], optics.secondShare[i]);
      const from = Math.max(0, Math.floor(optics.trace[i] - reach));
      const n = Math.min(ny - 1, Math.ceil(optics.trace[i] + reach)) - from + 1;
      if (n <= 0) continue;
      profileWeights(optics.table, optics.trace[i], optics.sigma[i], optics.secondShare[i], from, n, weights);
      const at = x * ny + from;
      for (let j = 0; j < n; j++) byColumn[at + j] += flux[i] * weights[j];
    }
  }
  return turn(byColumn, nx, ny);
}

function turn(byColumn: Float64Array, nx: number, ny: number): Float64Array {
  const image = new Float64Array(nx * ny);
  for (let x = 0; x < nx; x++) {
    for (let y = 0; y < ny; y++) image[y * nx + x] = byColumn[x * ny + y];
  }
  return image;
}

/** ny × nx, e⁻ per pixel: `share` of all the light as a smooth surface, the product of the light's run along x and along
 * y, each blurred by a sixth of the frame with mirrored ends. Its sum is share × the light's sum. */
export function scatteredLight(light: Float64Array, nx: number, ny: number, share: number): Float64Array {
  const alongX = new Float64Array(nx);
  const alongY = new Float64Array(ny);
  for (let i = 0; i < light.length; i++) {
    alongX[i % nx] += light[i];
    alongY[Math.floor(i / nx)] += light[i];
  }
  const total = alongX.reduce((sum, v) => sum + v, 0);
  const surface = new Float64Array(nx * ny);
  if (total <= 0 || share === 0) return surface;
  const xShare = unitSum(blur(alongX, nx / 6));
  const yShare = unitSum(blur(alongY, ny / 6));
  for (let y = 0; y < ny; y++) {
    for (let x = 0; x < nx; x++) surface[y * nx + x] = share * total * xShare[x] * yShare[y];
  }
  return surface;
}

function blur(values: Float64Array, sigma: number): Float64Array {
  const n = values.length;
  const out = new Float64Array(n);
  const half = Math.ceil(5 * sigma);
  const kernel = Float64Array.from({ length: 2 * half + 1 }, (_v, i) => Math.exp(-0.5 * ((i - half) / sigma) ** 2));
  for (let i = 0; i < n; i++) {
    for (let j = -half; j <= half; j++) out[mirrored(i + j, n)] += values[i] * kernel[j + half];
  }
  return out;
}

/** −1 → 0, n → n − 1, as often as needed. */
function mirrored(i: number, n: number): number {
  const wrapped = ((i % (2 * n)) + 2 * n) % (2 * n);
  return wrapped < n ? wrapped : 2 * n - 1 - wrapped;
}

function unitSum(values: Float64Array): Float64Array {
  const total = values.reduce((sum, v) => sum + v, 0);
  return values.map((v) => v / total);
}
