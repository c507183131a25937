/** How a fibre's light spreads across its tramline, integrated exactly over pixels.
 *
 * One shape for all fibres in the variable v = (y − centre) / σ + q·d, stretched by each fibre's own width σ(x):
 *
 *     (1 − q − w) · Gaussian(v)  +  q · Gaussian((v − d) / r) / r  +  w · wing(v)
 *
 * q, r, d: share, relative width and offset of a second Gaussian, which makes the skew; w: share of a broad symmetric
 * wing. The mean of that mixture is q·d, so the `+ q·d` in v puts the centroid of the whole profile, wings included, on
 * `centre`. The profile is cut at |v| = `reach` and its integral is 1. A pixel's weight is the difference of the
 * cumulative profile at its edges. */
import { normalCumulative, normalDensity } from "./gaussian.js";

export interface ProfileShape {
  /** q, at the middle of the frame. */
  secondShare: number;
  /** r ≥ 1 and d, in units of σ. */
  secondWidth: number;
  secondOffset: number;
  /** w. */
  wingShare: number;
  wing: "exponential" | "moffat";
  /** Scale length in units of σ: e-folding of the exponential, α of the Moffat. */
  wingScale: number;
  /** Moffat exponent, > 1: (1 + (u/α)²)^−β. */
  wingBeta: number;
  /** Where the profile ends, in units of σ. */
  reach: number;
}

/** Cumulative profile as cubic Hermite tables (value and slope at the nodes); error below 2e-11: h⁴/384 · max|Φ⁗|. */
export interface ProfileTable {
  shape: ProfileShape;
  /** [base, base slope · step, second, second slope · step] at every node from −reach to +reach. */
  nodes: Float64Array;
  nodesPerSigma: number;
}

const NODES_PER_SIGMA = 128;

export function buildProfileTable(shape: ProfileShape): ProfileTable {
  const half = Math.ceil((shape.reach + 1) * NODES_PER_SIGMA);
  const wing = wingFunctions(shape);
  const nodes = new Float64Array(4 * (2 * half + 1));
  for (let i = -half; i <= half; i++) {
    const u = i / NODES_PER_SIGMA;
    const v = (u - shape.secondOffset) / shape.secondWidth;
    const at = 4 * (i + half);
    nodes[at] = (1 - shape.wingShare) * normalCumulative(u) + shape.wingShare * wing.cumulative(u);
    nodes[at + 1] = ((1 - shape.wingShare) * normalDensity(u) + shape.wingShare * wing.density(u)) / NODES_PER_SIGMA;
    nodes[at + 2] = normalCumulative(v) - normalCumulative(u);
    nodes[at + 3] = (normalDensity(v) / shape.secondWidth - normalDensity(u)) / NODES_PER_SIGMA;
  }
  return { shape, nodes, nodesPerSigma: NODES_PER_SIGMA };
}

/** Weights of the pixels y0 … y0 + n − 1 for a fibre centred at `centre` with width `sigma` (pixels) and share
 * `secondShare`; written to `out[0 … n − 1]`. They sum to 1 over all pixels that the profile reaches. */
export function profileWeights(
  table: ProfileTable,
  centre: number,
  sigma: number,
  secondShare: number,
  y0: number,
  n: number,
  out: Float64Array,
): void {
  const reach = table.shape.reach;
  const floor = rawCumulative(table, -reach, secondShare);
  const scale = 1 / (rawCumulative(table, reach, secondShare) - floor);
  const step = 1 / sigma;
  const start = (y0 - 0.5 - centre) * step + secondShare * table.shape.secondOffset;
  let below = 0;
  for (let i = 0; i <= n; i++) {
    const v = start + i * step;
    const above = v <= -reach ? 0 : v >= reach ? 1 : (rawCumulative(table, v, secondShare) - floor) * scale;
    if (i > 0) out[i - 1] = above - below;
    below = above;
  }
}

/** Farthest that a profile of this width reaches from its centroid, pixels. */
export function profileReachPixels(table: ProfileTable, sigma: number, secondShare: number): number {
  return sigma * (table.shape.reach + Math.abs(secondShare * table.shape.secondOffset));
}

function rawCumulative(table: ProfileTable, u: number, secondShare: number): number {
  const nodes = table.nodes;
  const place = u * table.nodesPerSigma + (nodes.length - 4) / 8;
  const cell = Math.floor(place);
  const s = place - cell;
  const at = 4 * cell;
  const r = 1 - s;
  const lower = r * r * (1 + 2 * s);
  const upper = s * s * (3 - 2 * s);
  const slopeLower = s * r * r;
  const slopeUpper = s * s * r;
  const base = lower * nodes[at] + upper * nodes[at + 4] + slopeLower * nodes[at + 1] - slopeUpper * nodes[at + 5];
  if (secondShare === 0) return base;
  return (
    base +
    secondShare *
      (lower * nodes[at + 2] + upper * nodes[at + 6] + slopeLower * nodes[at + 3] - slopeUpper * nodes[at + 7])
  );
}

interface Wing {
  cumulative(u: number): number;
  density(u: number): number;
}

function wingFunctions(shape: ProfileShape): Wing {
  return shape.wing === "exponential" ? exponentialWing(shape.wingScale) : moffatWing(shape);
}

function exponentialWing(scale: number): Wing {
  return {
    cumulative: (u) => (u < 0 ? 0.5 * Math.exp(u / scale) : 1 - 0.5 * Math.exp(-u / scale)),
    density: (u) => (0.5 / scale) * Math.exp(-Math.abs(u) / scale),
  };
}

/** Moffat 1969, A&A 3, 455, as a function of one coordinate: (1 + (u/α)²)^−β. Its integral by Simpson's rule between
 * nodes, cut and normalised over the table. */
function moffatWing(shape: ProfileShape): Wing {
  const alpha = shape.wingScale;
  const bare = (u: number) => (1 + (u / alpha) ** 2) ** -shape.wingBeta;
  const half = Math.ceil((shape.reach + 1) * NODES_PER_SIGMA);
  const integral = new Float64Array(half + 1);
  for (let i = 1; i <= half; i++) {
    const [from, to] = [(i - 1) / NODES_PER_SIGMA, i / NODES_PER_SIGMA];
    integral[i] = integral[i - 1] + (bare(from) + 4 * bare((from + to) / 2) + bare(to)) / (6 * NODES_PER_SIGMA);
  }
  const total = 2 * integral[half];
  const upTo = (u: number) => integral[Math.min(half, Math.round(Math.abs(u) * NODES_PER_SIGMA))] / total;
  return { cumulative: (u) => (u < 0 ? 0.5 - upTo(u) : 0.5 + upTo(u)), density: (u) => bare(u) / total };
}
