/** The profile on pixels: how a fibre's light in one column falls on the rows of its window.
 *
 * Integrated over each pixel exactly, as the difference of the cumulative profile at its edges, never the value
 * at its middle. Evaluated at four nodes of a block of columns and interpolated between them by a cubic, so that
 * the cost does not depend on the model; where lines run steeply the blocks are narrower. */
import { erf } from "./erf.js";
import { legendreArgument, legendreValue } from "./legendre.js";
import { type ShapeTable, shapeTerms, shapeWeights } from "./shape.js";

/** Columns of a block; four nodes each. With 4 the nodes are the columns themselves and nothing is interpolated. */
export type BlockColumns = 4 | 8 | 16;

/** Furthest that a tramline may move within a block, pixels: keeps the cubic's error in a weight below 1e-6
 * for σ ≥ 0.8 px (remainder of interpolation: max|P⁗| / 4! · (movement/2)⁴ / 2³; P⁗ of the Gaussian on pixels, not
 * of its value at the middle: 2.6 px⁻⁴ at σ = 0.8 px). */
export const largestMovementPixels = 0.18;

const rootHalf = Math.SQRT1_2;

/** cos π/8 and cos 3π/8: where four Chebyshev nodes lie on [−1, 1]. */
const chebyshev = [-0.9238795325112867, -0.3826834323650898, 0.3826834323650898, 0.9238795325112867];
const everyColumn = [-0.75, -0.25, 0.25, 0.75];

/** Light of a Gaussian of unit integral on pixels `first` … `first + n − 1`; centre and σ in pixels. Unit-free, [n]. */
export function gaussianWeights(centre: number, sigma: number, first: number, n: number): Float64Array {
  const scale = rootHalf / sigma;
  const weights = new Float64Array(n);
  let below = erf((first - 0.5 - centre) * scale);
  for (let i = 0; i < n; i++) {
    const above = erf((first + i + 0.5 - centre) * scale);
    weights[i] = 0.5 * (above - below);
    below = above;
  }
  return weights;
}

/** Distance of the four nodes from the block's first column, columns. */
export function blockNodes(blockColumns: BlockColumns): number[] {
  const unit = blockColumns === 4 ? everyColumn : chebyshev;
  return unit.map((u) => (blockColumns - 1) / 2 + (blockColumns / 2) * u);
}

/** Lagrange's cubic through the nodes: what each node counts in column `offset` of the block; [4], sum 1. */
export function nodeShares(blockColumns: BlockColumns, offset: number): number[] {
  const nodes = blockNodes(blockColumns);
  return nodes.map((own) =>
    nodes.reduce((share, other) => (other === own ? share : (share * (offset - other)) / (own - other)), 1),
  );
}

/** What a block of columns needs of the fibres: the profiles at its nodes. */
export interface BlockProfiles {
  /** nFibre: first row of each fibre's window, the same for all columns of the block; may lie outside the frame. */
  start: Int32Array;
  /** nFibre × 4: centre at the nodes, counted from `start`, pixels. */
  centre: Float64Array;
  /** nFibre × 4 × nWindow: weights at the nodes. */
  weights: Float64Array;
}

export interface ProfileInput {
  nx: number;
  ny: number;
  nFibre: number;
  /** Rows each side of the middle one: a window has 2·halfWindow + 1. */
  halfWindow: number;
  blockColumns: BlockColumns;
  /** nFibre × nTrace: Legendre series of y(x), pixels. */
  trace: Float64Array;
  nTrace: number;
  /** nFibre × nWidth: Legendre series of σ(x), pixels. */
  width: Float64Array;
  nWidth: number;
  /** Absent: Gaussians of those widths. */
  shape?: ShapeTable;
}

/** Profiles of all fibres at the nodes of the block that begins with column `x0`. */
export function blockProfiles(input: ProfileInput, x0: number): BlockProfiles {
  const { nFibre, halfWindow, nTrace, nWidth } = input;
  const nWindow = 2 * halfWindow + 1;
  const nodes = blockNodes(input.blockColumns).map((node) => legendreArgument(x0 + node, input.nx));
  const start = new Int32Array(nFibre);
  const centre = new Float64Array(4 * nFibre);
  const weights = new Float64Array(4 * nFibre * nWindow);
  for (let k = 0; k < nFibre; k++) {
    const y = nodes.map((t) => legendreValue(input.trace, t, k * nTrace, nTrace));
    start[k] = windowStart((y[0] + y[1] + y[2] + y[3]) / 4, halfWindow, input.ny);
    nodes.forEach((t, i) => {
      const sigma = legendreValue(input.width, t, k * nWidth, nWidth);
      centre[4 * k + i] = y[i] - start[k];
      weights.set(profileWeights(input, t, y[i], sigma, start[k], nWindow), (4 * k + i) * nWindow);
    });
  }
  return { start, centre, weights };
}

/** One window under the input's profile model; `t`: x on [−1, 1]. */
function profileWeights(
  input: ProfileInput,
  t: number,
  y: number,
  sigma: number,
  first: number,
  n: number,
): Float64Array {
  const { shape } = input;
  if (shape === undefined) return gaussianWeights(y, sigma, first, n);
  const terms = shapeTerms(t, legendreArgument(y, input.ny), sigma, shape.referenceWidth);
  return shapeWeights(shape, terms, y, sigma, first, n);
}

/** First row of a window around `y`; a window never lies further out than just beyond the frame. */
function windowStart(y: number, halfWindow: number, ny: number): number {
  const start = Math.floor(y + 0.5) - halfWindow;
  return Math.min(Math.max(start, -(2 * halfWindow + 1)), ny);
}

/** The block's weights interpolated to its column `offset`: [nFibre × nWindow]. */
export function columnWeights(block: BlockProfiles, nWindow: number, shares: number[]): Float64Array {
  const nFibre = block.start.length;
  const weights = new Float64Array(nFibre * nWindow);
  for (let k = 0; k < nFibre; k++) {
    for (let i = 0; i < nWindow; i++) {
      let sum = 0;
      for (let node = 0; node < 4; node++) sum += shares[node] * block.weights[(4 * k + node) * nWindow + i];
      weights[k * nWindow + i] = sum;
    }
  }
  return weights;
}
