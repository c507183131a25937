/** The smooth large-scale shape of an evenly lit picture: a two-dimensional Legendre series fitted to means of blocks of
 * pixels. A block's mean is compared with the mean of the series over the same pixels, since illumination curves within
 * a block by more than the response's errors. */
import type { Region } from "./assemble.js";
import { clippedScatter } from "./clip.js";
import { invertPositive } from "./smoothLevel.js";

const BLOCK = 16;
const MOST_DEGREE = 7;
/** Blocks along an axis for each degree. */
const BLOCKS_PER_DEGREE = 2;
const CLIP_SIGMAS = 5;

/** Shape of one region of `image` [ny × nx]; returns what gives a row of it, [x1 − x0], the same array each time.
 * NaN when the region holds too few values. */
export function largeScaleShape(image: Float32Array, nx: number, region: Region): (y: number) => Float64Array {
  const x = axisTerms(region.x0, region.x1);
  const y = axisTerms(region.y0, region.y1);
  const coef = clippedFit(blocksOf(image, nx, x, y), x.nTerm * y.nTerm);
  const alongRow = new Float64Array(x.nTerm);
  const row = new Float64Array(region.x1 - region.x0);
  return (at) => {
    const py = y.terms(at);
    for (let a = 0; a < x.nTerm; a++) {
      alongRow[a] = 0;
      for (let b = 0; b < y.nTerm; b++) alongRow[a] += py[b] * coef[b * x.nTerm + a];
    }
    for (let i = 0; i < row.length; i++) row[i] = dot(alongRow, x.terms(region.x0 + i));
    return row;
  };
}

interface AxisTerms {
  nTerm: number;
  /** First pixels of the blocks, and the end of the last. */
  edges: number[];
  /** P_0 … P_n at a pixel, and their mean over pixels from … to − 1. */
  terms: (at: number) => Float64Array;
  meanTerms: (from: number, to: number) => Float64Array;
}

function axisTerms(from: number, to: number): AxisTerms {
  const size = to - from;
  const nBlock = Math.max(1, Math.round(size / BLOCK));
  const nTerm = 1 + Math.min(MOST_DEGREE, Math.floor(nBlock / BLOCKS_PER_DEGREE));
  const table = Array.from({ length: size }, (_, i) => legendreTerms(nTerm, (2 * i) / Math.max(1, size - 1) - 1));
  return {
    nTerm,
    edges: Array.from({ length: nBlock + 1 }, (_, i) => from + Math.floor((size * i) / nBlock)),
    terms: (at) => table[at - from],
    meanTerms: (start, end) => {
      const mean = new Float64Array(nTerm);
      for (let at = start; at < end; at++)
        for (let j = 0; j < nTerm; j++) mean[j] += table[at - from][j] / (end - start);
      return mean;
    },
  };
}

/** P_0(t) … P_{n−1}(t): Abramowitz & Stegun 22.7.10. */
function legendreTerms(n: number, t: number): Float64Array {
  const out = new Float64Array(n);
  out[0] = 1;
  if (n > 1) out[1] = t;
  for (let j = 1; j + 1 < n; j++) out[j + 1] = ((2 * j + 1) * t * out[j] - j * out[j - 1]) / (j + 1);
  return out;
}

interface Block {
  /** nTermY × nTermX: the basis, averaged over the block. */
  terms: Float64Array;
  value: number;
}

function blocksOf(image: Float32Array, nx: number, x: AxisTerms, y: AxisTerms): Block[] {
  const blocks: Block[] = [];
  const alongX = x.edges.slice(1).map((end, i) => x.meanTerms(x.edges[i], end));
  for (let j = 0; j + 1 < y.edges.length; j++) {
    const py = y.meanTerms(y.edges[j], y.edges[j + 1]);
    for (let i = 0; i + 1 < x.edges.length; i++) {
      const values: number[] = [];
      for (let row = y.edges[j]; row < y.edges[j + 1]; row++) {
        for (let at = row * nx + x.edges[i]; at < row * nx + x.edges[i + 1]; at++) values.push(image[at]);
      }
      // Not their median: a dead column through a block would move it.
      const value = clippedScatter(values).mean;
      if (Number.isNaN(value)) continue;
      const terms = new Float64Array(x.nTerm * y.nTerm);
      for (let b = 0; b < y.nTerm; b++) for (let a = 0; a < x.nTerm; a++) terms[b * x.nTerm + a] = py[b] * alongX[i][a];
      blocks.push({ terms, value });
    }
  }
  return blocks;
}

function clippedFit(blocks: Block[], nTerm: number): Float64Array {
  let kept = blocks;
  let coef = leastSquares(kept, nTerm);
  for (let turn = 0; turn < 5; turn++) {
    const residuals = kept.map(({ terms, value }) => value - dot(coef, terms));
    const { sigma } = clippedScatter(residuals);
    const next = kept.filter((_, i) => Math.abs(residuals[i]) <= CLIP_SIGMAS * sigma);
    if (next.length === kept.length || next.length < 2 * nTerm) break;
    kept = next;
    coef = leastSquares(kept, nTerm);
  }
  return coef;
}

function leastSquares(blocks: Block[], n: number): Float64Array {
  const normal = new Float64Array(n * n);
  const right = new Float64Array(n);
  for (const { terms, value } of blocks) {
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

function dot(a: Float64Array, b: Float64Array): number {
  let sum = 0;
  for (let i = 0; i < a.length; i++) sum += a[i] * b[i];
  return sum;
}

/** Variance of the shape at a pixel for unit variance of every pixel, were all used: Legendre series are nearly orthogonal
 * on an even grid, Σ (2j + 1) P_j(t)² / n along each axis. The shape's edges are worse known than its middle. */
export function largeScaleLeverage(region: Region): (x: number, y: number) => number {
  const alongX = leverages(region.x0, region.x1);
  const alongY = leverages(region.y0, region.y1);
  return (x, y) => alongX[x - region.x0] * alongY[y - region.y0];
}

function leverages(from: number, to: number): Float64Array {
  const { terms } = axisTerms(from, to);
  return Float64Array.from({ length: to - from }, (_, i) =>
    terms(from + i).reduce((sum, value, j) => sum + ((2 * j + 1) * value * value) / (to - from), 0),
  );
}
