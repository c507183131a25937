/** The pixel response r: a detector flat over its own smooth large-scale shape, amplifier by amplifier, so that neither
 * the lamp's illumination nor an error of a gain goes into it. Mean of r is 1. */
import type { Region } from "./assemble.js";
import { clippedScatter, medianOf, thinned } from "./clip.js";
import type { Stack } from "./combine.js";
import { invertPositive } from "./smoothLevel.js";

const BLOCK = 16;
const MOST_DEGREE = 7;
/** Below this a pixel is no detector any more; above its inverse it is hot or glued to a neighbour (common practice). */
const LOWEST_RESPONSE = 0.3;
/** Where the lamp leaves less than this share of its median, the flat says nothing. */
const UNLIT_SHARE = 0.02;

export interface PixelResponse {
  /** ny × nx; 1 where the flat says nothing. */
  response: Float32Array;
  /** ny × nx: (σ_r / r)². */
  relativeVariance: Float32Array;
  /** ny × nx: 1 where the response is too low, too high or unknown. */
  unusable: Uint8Array;
  /** Robust scatter of r about 1, an amplifier. */
  scatter: number[];
}

/** @param stack the combined flat with its variance, any scale. */
export function pixelResponse(stack: Stack, nx: number, ny: number, regions: Region[]): PixelResponse {
  const response = new Float32Array(nx * ny).fill(1);
  const relativeVariance = new Float32Array(nx * ny);
  const unusable = new Uint8Array(nx * ny).fill(1);
  const floor = UNLIT_SHARE * medianOf(thinned(stack.mean));
  const scatter = regions.map((region) => {
    const shape = largeScaleShape(stack.mean, nx, region);
    const seen: number[] = [];
    for (let y = region.y0; y < region.y1; y++) {
      const row = shape(y);
      for (let x = region.x0; x < region.x1; x++) {
        const at = y * nx + x;
        const smooth = row[x - region.x0];
        const r = stack.mean[at] / smooth;
        if (!(smooth > floor) || !(r >= LOWEST_RESPONSE && r <= 1 / LOWEST_RESPONSE)) continue;
        response[at] = r;
        relativeVariance[at] = stack.variance[at] / stack.mean[at] ** 2;
        unusable[at] = 0;
        if ((x + 7 * y) % 5 === 0) seen.push(r);
      }
    }
    return clippedScatter(seen).sigma;
  });
  return { response, relativeVariance, unusable, scatter };
}

/** A two-dimensional Legendre series through medians of blocks, clipped; its degree follows the number of blocks.
 * Returns what gives a row of it, [x1 − x0]. */
function largeScaleShape(image: Float32Array, nx: number, region: Region): (y: number) => Float64Array {
  const blocks = blockMedians(image, nx, region);
  const { x0, x1, y0, y1 } = region;
  const degree = (size: number) => Math.max(0, Math.min(MOST_DEGREE, Math.floor(size / BLOCK / 3)));
  const nTermX = degree(x1 - x0) + 1;
  const nTermY = degree(y1 - y0) + 1;
  const toUnit = (at: number, from: number, to: number) => (2 * (at - from)) / Math.max(1, to - 1 - from) - 1;
  const px = new Float64Array(nTermX);
  const py = new Float64Array(nTermY);
  const terms = new Float64Array(nTermX * nTermY);
  const basis = (x: number, y: number) => {
    legendreTerms(px, toUnit(x, x0, x1));
    legendreTerms(py, toUnit(y, y0, y1));
    for (let b = 0; b < nTermY; b++) for (let a = 0; a < nTermX; a++) terms[b * nTermX + a] = py[b] * px[a];
    return terms;
  };
  let kept = blocks;
  let coef = leastSquares(kept, basis, terms.length);
  for (let turn = 0; turn < 5; turn++) {
    const residuals = kept.map(({ x, y, value }) => value - dot(coef, basis(x, y)));
    const { sigma } = clippedScatter(residuals);
    const next = kept.filter((_, i) => Math.abs(residuals[i]) <= 5 * sigma);
    if (next.length === kept.length || next.length < 2 * terms.length) break;
    kept = next;
    coef = leastSquares(kept, basis, terms.length);
  }
  const columns = Array.from({ length: x1 - x0 }, (_, i) => {
    legendreTerms(px, toUnit(x0 + i, x0, x1));
    return px.slice();
  });
  const alongRow = new Float64Array(nTermX);
  const row = new Float64Array(x1 - x0);
  return (y) => {
    legendreTerms(py, toUnit(y, y0, y1));
    for (let a = 0; a < nTermX; a++) {
      alongRow[a] = 0;
      for (let b = 0; b < nTermY; b++) alongRow[a] += py[b] * coef[b * nTermX + a];
    }
    for (let i = 0; i < row.length; i++) row[i] = dot(alongRow, columns[i]);
    return row;
  };
}

interface Block {
  x: number;
  y: number;
  value: number;
}

function blockMedians(image: Float32Array, nx: number, { x0, x1, y0, y1 }: Region): Block[] {
  const blocks: Block[] = [];
  const edges = (from: number, to: number) => {
    const n = Math.max(1, Math.round((to - from) / BLOCK));
    return Array.from({ length: n + 1 }, (_, i) => from + Math.floor(((to - from) * i) / n));
  };
  const xs = edges(x0, x1);
  const ys = edges(y0, y1);
  for (let j = 0; j + 1 < ys.length; j++) {
    for (let i = 0; i + 1 < xs.length; i++) {
      const values: number[] = [];
      for (let y = ys[j]; y < ys[j + 1]; y++) for (let x = xs[i]; x < xs[i + 1]; x++) values.push(image[y * nx + x]);
      const value = medianOf(values);
      if (Number.isNaN(value)) continue;
      blocks.push({ x: (xs[i] + xs[i + 1] - 1) / 2, y: (ys[j] + ys[j + 1] - 1) / 2, value });
    }
  }
  return blocks;
}

/** P_0(t) … P_n(t): Abramowitz & Stegun 22.7.10. */
function legendreTerms(out: Float64Array, t: number): void {
  out[0] = 1;
  if (out.length > 1) out[1] = t;
  for (let j = 1; j + 1 < out.length; j++) out[j + 1] = ((2 * j + 1) * t * out[j] - j * out[j - 1]) / (j + 1);
}

function dot(a: Float64Array, b: Float64Array): number {
  let sum = 0;
  for (let i = 0; i < a.length; i++) sum += a[i] * b[i];
  return sum;
}

function leastSquares(blocks: Block[], basis: (x: number, y: number) => Float64Array, n: number): Float64Array {
  const normal = new Float64Array(n * n);
  const right = new Float64Array(n);
  for (const { x, y, value } of blocks) {
    const terms = basis(x, y);
    for (let a = 0; a < n; a++) {
      right[a] += terms[a] * value;
      for (let b = 0; b < n; b++) normal[a * n + b] += terms[a] * terms[b];
    }
  }
  const inverse = invertPositive(normal, n);
  const coef = new Float64Array(n).fill(inverse ? 0 : Number.NaN);
  if (inverse) for (let a = 0; a < n; a++) for (let b = 0; b < n; b++) coef[a] += inverse[a * n + b] * right[b];
  return coef;
}
