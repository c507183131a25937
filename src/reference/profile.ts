/** The profile on pixels: how a fibre's light in one column falls on the rows of its window.
 *
 * Integrated over each pixel exactly, as the difference of the cumulative profile at its edges, never the value
 * at its middle. Evaluated at six nodes of a block of columns and interpolated between them by a polynomial, so that
 * the cost does not depend on the model; where lines run steeply the blocks are narrower.
 *
 * Far from the fibre only the wings are left, a per cent of the light at most and smooth: there a weight is taken for four
 * columns together, from a line through two of the nodes. */
import { erf } from "./erf.js";
import { legendreArgument, legendreValue } from "./legendre.js";
import { type ShapeTable, shapeTerms, shapeWeights } from "./shape.js";

/** Columns of a block, with six nodes; with 4 the nodes are the columns themselves and nothing is interpolated. */
export type BlockColumns = 4 | 8 | 16 | 32 | 64;

/** Furthest that a tramline may move within a block, pixels, for profiles of that σ or more: keeps the interpolation's error
 * in a weight below 1e-6. The remainder is max|P⁽⁶⁾| / 6! · (movement/2)⁶ / 2⁵, and P⁽⁶⁾ of the Gaussian on pixels 20 px⁻⁶ at
 * most at σ = 0.8 px. Towards narrower profiles it grows as σ⁻⁷ at the most; pixels as wide as the profile smooth it, so
 * above 0.8 px the movement is let grow as σ only. */
export function largestMovement(sigma: number): number {
  const widths = sigma / 0.8;
  return 0.6 * Math.min(widths, widths * widths);
}

const rootHalf = Math.SQRT1_2;

/** Where six Chebyshev nodes lie on [−1, 1]: cos π/12, cos 3π/12, cos 5π/12. */
const chebyshev = [
  -0.9659258262890683,
  -Math.SQRT1_2,
  -0.25881904510252074,
  0.25881904510252074,
  Math.SQRT1_2,
  0.9659258262890683,
];
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

/** Distance of the nodes from the block's first column, columns. */
export function blockNodes(blockColumns: BlockColumns): number[] {
  const unit = blockColumns === 4 ? everyColumn : chebyshev;
  return unit.map((u) => (blockColumns - 1) / 2 + (blockColumns / 2) * u);
}

/** Lagrange's polynomial through the nodes: what each counts in column `offset` of the block; [nNode], sum 1. */
export function nodeShares(blockColumns: BlockColumns, offset: number): number[] {
  const nodes = blockNodes(blockColumns);
  return nodes.map((own) =>
    nodes.reduce((share, other) => (other === own ? share : (share * (offset - other)) / (own - other)), 1),
  );
}

/** At which nodes the wings are looked at: the second, and the last but one. */
export function wingNodes(blockColumns: BlockColumns): [number, number] {
  return [1, blockNodes(blockColumns).length - 2];
}

/** The line through those nodes, at the middle of the four columns of which one is `offset`: [2], sum 1. */
export function wingShares(blockColumns: BlockColumns, offset: number): [number, number] {
  const nodes = blockNodes(blockColumns);
  const [first, last] = wingNodes(blockColumns).map((node) => nodes[node]);
  const share = (offset - (offset % 4) + 1.5 - first) / (last - first);
  return [1 - share, share];
}

/** What a block of columns needs of the fibres: the profiles at its nodes. */
export interface BlockProfiles {
  nNode: number;
  /** nFibre: first row of each fibre's window, the same for all columns of the block; may lie outside the frame. */
  start: Int32Array;
  /** nFibre × nNode: centre at the nodes, counted from `start`, pixels. */
  centre: Float64Array;
  /** nFibre × nNode × nWindow: weights at the nodes. */
  weights: Float64Array;
  /** nFibre × 2 × 2·wing: weights below the window, then above it, at the nodes for wings. */
  wings: Float64Array;
}

export interface ProfileInput {
  nx: number;
  ny: number;
  nFibre: number;
  /** Rows each side of the middle one: a window has 2·halfWindow + 1. */
  halfWindow: number;
  /** Rows to either side of the window on which the far wing's light is taken off as the fluxes tell it; a multiple of 4. */
  wing: number;
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
  const { nFibre, halfWindow, nTrace, nWidth, wing } = input;
  const nWindow = 2 * halfWindow + 1;
  const nodes = blockNodes(input.blockColumns).map((node) => legendreArgument(x0 + node, input.nx));
  const nNode = nodes.length;
  const forWings = wingNodes(input.blockColumns);
  const start = new Int32Array(nFibre);
  const centre = new Float64Array(nNode * nFibre);
  const weights = new Float64Array(nNode * nFibre * nWindow);
  const wings = new Float64Array(4 * nFibre * wing);
  for (let k = 0; k < nFibre; k++) {
    const y = nodes.map((t) => legendreValue(input.trace, t, k * nTrace, nTrace));
    start[k] = windowStart(y.reduce((sum, one) => sum + one, 0) / nNode, halfWindow, input.ny);
    nodes.forEach((t, node) => {
      const sigma = legendreValue(input.width, t, k * nWidth, nWidth);
      centre[nNode * k + node] = y[node] - start[k];
      const which = forWings.indexOf(node);
      const beside = which < 0 ? 0 : wing;
      const wide = profileWeights(input, t, y[node], sigma, start[k] - beside, nWindow + 2 * beside);
      weights.set(wide.subarray(beside, beside + nWindow), (nNode * k + node) * nWindow);
      if (beside === 0) return;
      wings.set(wide.subarray(0, wing), (2 * k + which) * 2 * wing);
      wings.set(wide.subarray(wing + nWindow), (2 * k + which) * 2 * wing + wing);
    });
  }
  return { nNode, start, centre, weights, wings };
}

/** `n` rows from `first` on under the input's profile model; `t`: x on [−1, 1]. */
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
  const { nNode } = block;
  const nFibre = block.start.length;
  const weights = new Float64Array(nFibre * nWindow);
  for (let k = 0; k < nFibre; k++) {
    for (let i = 0; i < nWindow; i++) {
      let sum = 0;
      for (let node = 0; node < nNode; node++) {
        sum += shares[node] * block.weights[(nNode * k + node) * nWindow + i];
      }
      weights[k * nWindow + i] = sum;
    }
  }
  return weights;
}

/** Weights beside the windows, below and then above, for the four columns that `shares` (of `wingShares`) belongs to:
 * [nFibre × 2·wing]. */
export function columnWings(block: BlockProfiles, wing: number, shares: readonly number[]): Float64Array {
  const nFibre = block.start.length;
  const n = 2 * wing;
  return Float64Array.from({ length: nFibre * n }, (_, at) => {
    const first = Math.floor(at / n) * 2 * n + (at % n);
    const { wings } = block;
    return shares[0] * wings[first] + shares[1] * wings[first + n];
  });
}
