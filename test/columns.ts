/** Small extractions in which every number is chosen by the test: straight tramlines, a variance that does not follow the
 * light, blocks of four columns so that no profile is interpolated. Invented data. */
import type { ExtractionInput } from "../src/reference/extract.js";
import { gaussianWeights } from "../src/reference/profile.js";

export interface ColumnsSetup {
  nx?: number;
  ny: number;
  /** Pixels; a fibre's line climbs by `slope` pixels a column. */
  centres: number[];
  sigmas: number[];
  slope?: number;
  /** e⁻ of fibre k in column x. */
  flux: (k: number, x: number) => number;
  /** e⁻² of a pixel, photons included. */
  variance: (y: number, x: number) => number;
  /** e⁻ added to pixels: noise, hits, background. */
  extra?: (y: number, x: number) => number;
}

export function columnsInput(setup: ColumnsSetup, change: Partial<ExtractionInput> = {}): ExtractionInput {
  const { nx = 5, ny, centres, sigmas, slope = 0, flux, variance, extra = () => 0 } = setup;
  const nFibre = centres.length;
  const halfSpan = (slope * (nx - 1)) / 2;
  const electrons = new Float64Array(nx * ny);
  const fixedVarianceImage = new Float32Array(nx * ny);
  for (let x = 0; x < nx; x++) {
    const weights = centres.map((y, k) => gaussianWeights(y + slope * x, sigmas[k], 0, ny));
    for (let y = 0; y < ny; y++) {
      electrons[y * nx + x] = weights.reduce((sum, own, k) => sum + flux(k, x) * own[y], extra(y, x));
      fixedVarianceImage[y * nx + x] = variance(y, x);
    }
  }
  return {
    nx,
    ny,
    nFibre,
    halfWindow: 8,
    wing: 0,
    blockColumns: 4,
    trace: Float64Array.from(centres.flatMap((y) => [y + halfSpan, halfSpan])),
    nTrace: 2,
    width: Float64Array.from(sigmas),
    nWidth: 1,
    electrons: Float32Array.from(electrons),
    mask: new Uint8Array(nx * ny),
    noise: {
      bandOfRow: new Uint8Array(ny),
      fixedVariance: new Float32Array(nx).fill(1),
      fixedVarianceImage,
      inverseResponse: new Float32Array(nx * ny),
    },
    background: { nX: 1, nY: 1, coefficients: Float64Array.of(0) },
    seen: Int32Array.from(centres.flatMap(() => [0, nx - 1])),
    bandwidth: Math.min(4, nFibre - 1),
    method: "joint",
    crosstalk: false,
    halfAperture: 2.5,
    profileError: 0,
    kappa: 0,
    growKappa: 0,
    minRounds: 2,
    maxRounds: 8,
    rejected: new Uint8Array(nx * ny),
    ...change,
  };
}

/** Weights of fibre k on all rows in column x, zero outside its window as the extraction has them: [ny]. */
export function windowedWeights(input: ExtractionInput, k: number, x: number): Float64Array {
  const halfSpan = input.trace[2 * k + 1];
  const slope = input.nx > 1 ? (2 * halfSpan) / (input.nx - 1) : 0;
  const own = gaussianWeights(input.trace[2 * k] - halfSpan + slope * x, input.width[k], 0, input.ny);
  const blockMiddle = input.trace[2 * k] - halfSpan + slope * (4 * Math.floor(x / 4) + 1.5);
  const first = Math.floor(blockMiddle + 0.5) - input.halfWindow;
  return own.map((weight, y) => (y >= first && y <= first + 2 * input.halfWindow ? weight : 0));
}
