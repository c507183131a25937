// A frame to time extractions on: pitch 5 px, Gaussians of FWHM 2.4 px that change slowly, fluxes from 20 to 20 000 e⁻ per
// column at random neighbours, a smooth background, read noise of two amplifiers, cosmic rays and bad pixels.
// Invented data from a seed; the same for everyone who is timed.
import { MaskBit } from "../dist/reference/bits.js";
import { erf } from "./loop/erf.mjs";

export const pitch = 5;
export const halfWindow = 6;
const sigma = 2.4 / (2 * Math.sqrt(2 * Math.log(2)));
const backgroundSize = 3;

/** Rows enough for ten blocks with gaps between them, as the simulated files have. */
export const sizes = [
  { nFibre: 100, nx: 512, ny: 608 },
  { nFibre: 400, nx: 2048, ny: 2112 },
  { nFibre: 800, nx: 4096, ny: 4112 },
];
export const hugeSize = { nFibre: 2000, nx: 10240, ny: 10240 };

/** Uniform numbers in [0, 1): a linear congruential generator (Numerical Recipes), high bits first. @param {number} seed */
export function seeded(seed) {
  let state = (seed * 2654435761) >>> 0;
  return () => {
    state = (Math.imul(state, 1664525) + 1013904223) >>> 0;
    return state / 2 ** 32;
  };
}

/** The frame as the extraction takes it, three solves, rejection at 5 σ.
 * @param {{ nFibre: number, nx: number, ny: number }} size
 * @returns {import("../dist/reference/extract.js").ExtractionInput} */
export function makeFrame({ nFibre, nx, ny }) {
  const next = seeded(nFibre + nx);
  const trace = new Float64Array(nFibre * 4);
  const width = new Float64Array(nFibre * 2);
  for (let k = 0; k < nFibre; k++) {
    const middle = (ny - 1) / 2 + (k - (nFibre - 1) / 2) * pitch + 0.2 * (next() - 0.5);
    trace.set([middle, 0.0004 * nx, 0.0008 * nx, -0.00004 * nx], 4 * k);
    width.set([sigma * (1 + 0.01 * (next() - 0.5)), 0.02], 2 * k);
  }
  const background = { nX: backgroundSize, nY: backgroundSize, coefficients: backgroundCoefficients() };
  const electrons = backgroundImage(background.coefficients, nx, ny);
  for (let x = 0; x < nx; x++) addColumn(electrons, trace, width, nFibre, nx, ny, x);
  const bandOfRow = Uint8Array.from({ length: ny }, (_, y) => (y > ny / 3 ? 1 : 0));
  const fixedVariance = Float32Array.from({ length: 2 * nx }, (_, i) => (i < nx ? 9 : 9.6));
  addNoise(electrons, next);
  addCosmicRays(electrons, nx, next);
  const mask = makeMask(nx, ny, next);
  return {
    ...{ nx, ny, nFibre, halfWindow, wing: 0, blockColumns: 64, trace, nTrace: 4, width, nWidth: 2, electrons, mask },
    noise: { bandOfRow, fixedVariance },
    background,
    seen: Int32Array.from({ length: 2 * nFibre }, (_, i) => (i % 2 ? nx - 1 : 0)),
    ...{ bandwidth: 2, method: "joint", crosstalk: false, halfAperture: 2.5, profileError: 0.01 },
    ...{ kappa: 5, growKappa: 2.5, minRounds: 2, maxRounds: 2 },
    rejected: new Uint8Array(nx * ny),
  };
}

function backgroundCoefficients() {
  return Float64Array.of(20, 2, 0.5, 1.5, 0.3, 0.1, -0.7, 0.2, 0.1);
}

function backgroundImage(coefficients, nx, ny) {
  const image = new Float32Array(nx * ny);
  const n = backgroundSize;
  for (let y = 0; y < ny; y++) {
    const v = (2 * y) / (ny - 1) - 1;
    const py = [1, v, 1.5 * v * v - 0.5];
    const c = Array.from({ length: n }, (_, i) => py.reduce((sum, p, j) => sum + coefficients[i * n + j] * p, 0));
    for (let x = 0; x < nx; x++) {
      const u = (2 * x) / (nx - 1) - 1;
      image[y * nx + x] = c[0] + c[1] * u + c[2] * (1.5 * u * u - 0.5);
    }
  }
  return image;
}

function addColumn(electrons, trace, width, nFibre, nx, ny, x) {
  const t = (2 * x) / (nx - 1) - 1;
  const p2 = 1.5 * t * t - 0.5;
  const p3 = (2.5 * t * t - 1.5) * t;
  for (let k = 0; k < nFibre; k++) {
    const y = trace[4 * k] + trace[4 * k + 1] * t + trace[4 * k + 2] * p2 + trace[4 * k + 3] * p3;
    const scale = Math.SQRT1_2 / (width[2 * k] + width[2 * k + 1] * t);
    const flux = 20 * 10 ** (3 * Math.abs(Math.sin(k * 2.3 + x / 300)));
    const first = Math.max(Math.round(y) - halfWindow, 0);
    let below = erf((first - 0.5 - y) * scale);
    for (let row = first; row <= Math.min(first + 2 * halfWindow, ny - 1); row++) {
      const above = erf((row + 0.5 - y) * scale);
      electrons[row * nx + x] += flux * 0.5 * (above - below);
      below = above;
    }
  }
}

/** Bad pixels, one in 10 000; and here and there a patch that is saturated, or bad, as large as a fibre's profile. */
function makeMask(nx, ny, next) {
  const mask = new Uint8Array(nx * ny);
  for (let n = 0; n < mask.length * 1e-4; n++) mask[Math.floor(next() * mask.length)] = MaskBit.bad;
  for (let n = 0; n < mask.length / 1e5; n++) {
    const [x, y] = [Math.floor(next() * (nx - 3)), Math.floor(next() * (ny - 6))];
    const bit = n % 2 ? MaskBit.bad : MaskBit.saturated;
    for (let row = y; row < y + 6; row++) mask.fill(bit, row * nx + x, row * nx + x + 3);
  }
  return mask;
}

/** Photons and readout, as one normal deviate (Box & Muller 1958, two at a time). */
function addNoise(electrons, next) {
  for (let i = 0; i < electrons.length; i += 2) {
    const radius = Math.sqrt(-2 * Math.log(1 - next()));
    const angle = 2 * Math.PI * next();
    electrons[i] += Math.sqrt(9 + electrons[i]) * radius * Math.cos(angle);
    if (i + 1 < electrons.length) electrons[i + 1] += Math.sqrt(9 + electrons[i + 1]) * radius * Math.sin(angle);
  }
}

/** One hit in 20 000 pixels, 1 to 5 pixels long. */
function addCosmicRays(electrons, nx, next) {
  for (let n = 0; n < electrons.length / 20_000; n++) {
    let at = Math.floor(next() * electrons.length);
    const step = [1, nx, nx + 1, nx - 1][Math.floor(4 * next())];
    const light = 300 * 30 ** next();
    for (let left = 1 + Math.floor(5 * next()); left > 0 && at < electrons.length; left--, at += step)
      electrons[at] += light;
  }
}
