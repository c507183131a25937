/** The profile on pixels: integrated over each pixel exactly, evaluated at four nodes of a block of columns,
 * interpolated between them by a cubic in the lanes. src/reference/profile.ts says why and how well. */
import { erf } from "./erf";
import { count, pointer, Word, windowRows } from "./job";
import { loadSpread, spread } from "./lanes";
import { legendreValue } from "./legendre";
import { shapeWeights } from "./shape";

const rootHalf: f64 = 0.7071067811865476;

/** Light of a Gaussian of unit integral on pixels `first` … `first + n − 1`; centre and σ in pixels. `outPtr`: n of T. */
export function gaussianWeights<T extends number>(centre: f64, sigma: f64, first: i32, n: i32, outPtr: usize): void {
  const scale = rootHalf / sigma;
  let below = erf((<f64>first - 0.5 - centre) * scale);
  for (let i: i32 = 0; i < n; i++) {
    const above = erf((<f64>(first + i) + 0.5 - centre) * scale);
    store<T>(outPtr + <usize>i * sizeof<T>(), <T>(0.5 * (above - below)));
    below = above;
  }
}

/** For the door and its tests: the same in f64. */
export function gaussianWeights64(centre: f64, sigma: f64, first: i32, n: i32, outPtr: usize): void {
  gaussianWeights<f64>(centre, sigma, first, n, outPtr);
}

/** Distance of node `node` from the block's first column, columns. */
export function nodeOffset(blockColumns: i32, node: i32): f64 {
  const inner: f64 = blockColumns == 4 ? 0.25 : 0.3826834323650898; // cos 3π/8
  const outer: f64 = blockColumns == 4 ? 0.75 : 0.9238795325112867; // cos π/8
  const size = node == 0 || node == 3 ? outer : inner;
  return <f64>(blockColumns - 1) / 2.0 + (<f64>blockColumns / 2.0) * (node < 2 ? -size : size);
}

/** Lagrange's cubic through the nodes, for every column of a block: Word.nodeShares, node by node. */
export function prepareNodeShares<T extends number>(job: usize): void {
  const blockColumns = count(job, Word.blockColumns);
  let at = pointer(job, Word.nodeShares);
  for (let own: i32 = 0; own < 4; own++) {
    for (let column: i32 = 0; column < blockColumns; column++) {
      let share: f64 = 1.0;
      const here = nodeOffset(blockColumns, own);
      for (let other: i32 = 0; other < 4; other++) {
        const there = nodeOffset(blockColumns, other);
        if (other != own) share = (share * (<f64>column - there)) / (here - there);
      }
      store<T>(at, <T>share);
      at += sizeof<T>();
    }
  }
}

/** Profiles of all fibres at the nodes of the block that begins with column `x0`. */
export function blockProfiles<T extends number>(job: usize, x0: i32): void {
  const nTrace = count(job, Word.nTrace);
  const nWidth = count(job, Word.nWidth);
  const nWindow = windowRows(job);
  let weightsAt = pointer(job, Word.nodeWeights);
  let centreAt = pointer(job, Word.nodeCentre);
  for (let k: i32 = 0; k < count(job, Word.nFibre); k++) {
    const trace = pointer(job, Word.trace) + ((<usize>(k * nTrace)) << 3);
    const width = pointer(job, Word.width) + ((<usize>(k * nWidth)) << 3);
    let sum: f64 = 0.0;
    for (let node: i32 = 0; node < 4; node++) {
      sum += legendreValue(trace, nTrace, nodeArgument(job, x0, node));
    }
    const start = windowStart(sum / 4.0, job);
    store<i32>(pointer(job, Word.start) + ((<usize>k) << 2), start);
    for (let node: i32 = 0; node < 4; node++) {
      const t = nodeArgument(job, x0, node);
      const y = legendreValue(trace, nTrace, t);
      store<T>(centreAt, <T>(y - <f64>start));
      nodeWeights<T>(job, t, y, legendreValue(width, nWidth, t), start, weightsAt);
      centreAt += sizeof<T>();
      weightsAt += <usize>nWindow * sizeof<T>();
    }
  }
}

/** One window of one fibre under the job's profile model. */
function nodeWeights<T extends number>(job: usize, t: f64, y: f64, width: f64, start: i32, outPtr: usize): void {
  const shape = pointer(job, Word.shape);
  const nWindow = windowRows(job);
  if (shape == 0) {
    gaussianWeights<T>(y, width, start, nWindow, outPtr);
    return;
  }
  const ny = count(job, Word.ny);
  const across: f64 = ny > 1 ? (2.0 * y) / <f64>(ny - 1) - 1.0 : 0.0;
  shapeWeights<T>(shape, t, across, y, width, start, nWindow, outPtr, pointer(job, Word.shapeTerms));
}

/** Where a node lies on the series' interval [−1, 1]; a single column sits at 0. */
function nodeArgument(job: usize, x0: i32, node: i32): f64 {
  const nx = count(job, Word.nx);
  if (nx < 2) return 0.0;
  return (2.0 * (<f64>x0 + nodeOffset(count(job, Word.blockColumns), node))) / <f64>(nx - 1) - 1.0;
}

/** Weights and centres of the group of columns that begins `offset` columns into the block. */
export function interpolateProfiles<T extends number>(job: usize, offset: i32): void {
  const nWindow = windowRows(job);
  const blockBytes = <usize>count(job, Word.blockColumns) * sizeof<T>();
  const sharesAt = pointer(job, Word.nodeShares) + <usize>offset * sizeof<T>();
  const share0 = v128.load(sharesAt);
  const share1 = v128.load(sharesAt + blockBytes);
  const share2 = v128.load(sharesAt + 2 * blockBytes);
  const share3 = v128.load(sharesAt + 3 * blockBytes);
  let weightsAt = pointer(job, Word.weights);
  let nodesAt = pointer(job, Word.nodeWeights);
  const nodeBytes = <usize>nWindow * sizeof<T>();
  const nFibre = count(job, Word.nFibre);
  for (let k: i32 = 0; k < nFibre; k++) {
    for (let i: i32 = 0; i < nWindow; i++) {
      v128.store(weightsAt, cubic<T>(nodesAt, nodeBytes, share0, share1, share2, share3));
      weightsAt += 16;
      nodesAt += sizeof<T>();
    }
    nodesAt += 3 * nodeBytes;
    const centre = pointer(job, Word.nodeCentre) + <usize>(4 * k) * sizeof<T>();
    v128.store(
      pointer(job, Word.centre) + ((<usize>k) << 4),
      cubic<T>(centre, sizeof<T>(), share0, share1, share2, share3),
    );
  }
}

/** First row of a window around `y`; a window never lies further out than just beyond the frame. */
function windowStart(y: f64, job: usize): i32 {
  const start = <i32>floor(clamped(y + 0.5, -1e9, 1e9)) - count(job, Word.halfWindow);
  return min(max(start, -windowRows(job)), count(job, Word.ny));
}

function clamped(x: f64, low: f64, high: f64): f64 {
  return min(max(x, low), high);
}

function cubic<T extends number>(ptr: usize, stride: usize, s0: v128, s1: v128, s2: v128, s3: v128): v128 {
  let sum = v128.add<T>(spread<T>(0), v128.mul<T>(s0, loadSpread<T>(ptr)));
  sum = v128.add<T>(sum, v128.mul<T>(s1, loadSpread<T>(ptr + stride)));
  sum = v128.add<T>(sum, v128.mul<T>(s2, loadSpread<T>(ptr + 2 * stride)));
  return v128.add<T>(sum, v128.mul<T>(s3, loadSpread<T>(ptr + 3 * stride)));
}
