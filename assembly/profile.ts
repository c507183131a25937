/** The profile on pixels: integrated over each pixel exactly, evaluated at a few nodes of a block of columns,
 * interpolated between them by a polynomial in the lanes. src/reference/profile.ts says why and how well. */
import { erf } from "./erf";
import { erfInCells, prepareErfCells } from "./erfCells";
import { count, pointer, Word, windowOffset, windowRows } from "./job";
import { loadSpread, spread } from "./lanes";
import { legendreValue } from "./legendre";
import { shapeAtColumn, shapePoints, shapeValues, shapeWeights } from "./shape";

const rootHalf: f64 = 0.7071067811865476;

/** Light of a Gaussian of unit integral on pixels `first` … `first + n − 1`; centre and σ in pixels. `outPtr`: n f64. For the
 * door: to the last digit, whatever it costs. */
export function gaussianWeights64(centre: f64, sigma: f64, first: i32, n: i32, outPtr: usize): void {
  const scale = rootHalf / sigma;
  let below: f64 = 0.0;
  for (let edge: i32 = 0; edge <= n; edge++) {
    const here = erf((<f64>(first + edge) - 0.5 - centre) * scale);
    if (edge > 0) store<f64>(outPtr + ((<usize>(edge - 1)) << 3), 0.5 * (here - below));
    below = here;
  }
}

/** The same for a node, to what T holds of it. `outPtr`: n of T. */
function gaussianAtNode<T extends number>(
  table: usize,
  centre: f64,
  sigma: f64,
  first: i32,
  n: i32,
  outPtr: usize,
): void {
  const scale = rootHalf / sigma;
  const from = <f64>first - 0.5 - centre;
  let below: f64 = 0.0;
  for (let edge: i32 = 0; edge <= n; edge++) {
    const here = erfInCells<T>(table, (from + <f64>edge) * scale);
    if (edge > 0) store<T>(outPtr + <usize>(edge - 1) * sizeof<T>(), <T>(0.5 * (here - below)));
    below = here;
  }
}

/** Nodes of a block. */
export function nodeCount(blockColumns: i32): i32 {
  return blockColumns == 4 ? 4 : 6;
}

/** Distance of node `node` from the block's first column, columns. */
export function nodeOffset(blockColumns: i32, node: i32): f64 {
  return <f64>(blockColumns - 1) / 2.0 + (<f64>blockColumns / 2.0) * nodePlace(blockColumns, node);
}

/** The same on [−1, 1] over the block. */
function nodePlace(blockColumns: i32, node: i32): f64 {
  const n = nodeCount(blockColumns);
  const inward = min(node, n - 1 - node);
  let place: f64 = 0.25881904510252074; // cos 5π/12
  if (n == 4) place = inward == 0 ? 0.75 : 0.25;
  else if (inward == 0)
    place = 0.9659258262890683; // cos π/12
  else if (inward == 1) place = 0.7071067811865476; // cos 3π/12
  return 2 * node < n ? -place : place;
}

/** Lagrange's polynomial through the nodes, for every column of a block: Word.nodeShares, node by node; and
 * for Gaussians the cells of erf. */
export function prepareNodeShares<T extends number>(job: usize): void {
  if (pointer(job, Word.shape) == 0) prepareErfCells(pointer(job, Word.shapeTable));
  const blockColumns = count(job, Word.blockColumns);
  let at = pointer(job, Word.nodeShares);
  for (let own: i32 = 0; own < nodeCount(blockColumns); own++) {
    for (let column: i32 = 0; column < blockColumns; column++) {
      let share: f64 = 1.0;
      const here = nodeOffset(blockColumns, own);
      for (let other: i32 = 0; other < nodeCount(blockColumns); other++) {
        const there = nodeOffset(blockColumns, other);
        if (other != own) share = (share * (<f64>column - there)) / (here - there);
      }
      store<T>(at, <T>share);
      at += sizeof<T>();
    }
  }
}

/** The two nodes at which wings are looked at: the second, and the last but one. */
function wingNode(blockColumns: i32, which: i32): i32 {
  return which == 0 ? 1 : nodeCount(blockColumns) - 2;
}

/** Profiles of the fibres at the nodes of the block that begins with column `x0`: of those whose byte in Word.needed is not
 * 0. Windows and centres of all. */
export function blockProfiles<T extends number>(job: usize, x0: i32): void {
  const nFibre = count(job, Word.nFibre);
  const nNode = nodeCount(count(job, Word.blockColumns));
  placeWindows<T>(job, x0, nNode);
  const shape = pointer(job, Word.shape);
  for (let node: i32 = 0; node < nNode; node++) {
    const t = nodeArgument(job, x0, node);
    if (shape) shapeAtColumn(shapeValues(shape), shapePoints(shape), t, pointer(job, Word.shapeTable));
    for (let k: i32 = 0; k < nFibre; k++) {
      if (load<u8>(pointer(job, Word.needed) + <usize>k)) nodeProfile<T>(job, k, node, nNode, t);
    }
  }
}

/** First rows of all windows, and centres at the nodes. */
function placeWindows<T extends number>(job: usize, x0: i32, nNode: i32): void {
  const nTrace = count(job, Word.nTrace);
  let centreAt = pointer(job, Word.nodeCentre);
  for (let k: i32 = 0; k < count(job, Word.nFibre); k++) {
    const trace = pointer(job, Word.trace) + ((<usize>(k * nTrace)) << 3);
    let sum: f64 = 0.0;
    for (let node: i32 = 0; node < nNode; node++) {
      sum += legendreValue(trace, nTrace, nodeArgument(job, x0, node));
    }
    const start = windowStart(sum / <f64>nNode, job);
    store<i32>(pointer(job, Word.start) + ((<usize>k) << 2), start);
    for (let node: i32 = 0; node < nNode; node++) {
      store<T>(centreAt, <T>(legendreValue(trace, nTrace, nodeArgument(job, x0, node)) - <f64>start));
      centreAt += sizeof<T>();
    }
  }
}

/** Fibre k's window at one node, and at two of them the wings beside it. */
function nodeProfile<T extends number>(job: usize, k: i32, node: i32, nNode: i32, t: f64): void {
  const nTrace = count(job, Word.nTrace);
  const nWidth = count(job, Word.nWidth);
  const nWindow = windowRows(job);
  const wing = count(job, Word.wing);
  const start = load<i32>(pointer(job, Word.start) + ((<usize>k) << 2));
  const y = legendreValue(pointer(job, Word.trace) + ((<usize>(k * nTrace)) << 3), nTrace, t);
  const width = legendreValue(pointer(job, Word.width) + ((<usize>(k * nWidth)) << 3), nWidth, t);
  const windowBytes = <usize>nWindow * sizeof<T>();
  const out = pointer(job, Word.nodeWeights) + <usize>(nNode * k + node) * windowBytes;
  const which: i32 = node == 1 ? 0 : node == nNode - 2 ? 1 : -1;
  if (wing == 0 || which < 0) {
    rowWeights<T>(job, t, y, width, start, nWindow, out);
    return;
  }
  const wide = pointer(job, Word.wideWeights);
  const wingBytes = <usize>wing * sizeof<T>();
  rowWeights<T>(job, t, y, width, start - wing, nWindow + 2 * wing, wide);
  memory.copy(out, wide + wingBytes, windowBytes);
  const wings = pointer(job, Word.wingNodes) + <usize>(2 * k + which) * 2 * wingBytes;
  memory.copy(wings, wide, wingBytes);
  memory.copy(wings + wingBytes, wide + wingBytes + windowBytes, wingBytes);
}

/** `n` rows from `first` on of one fibre under the job's profile model. */
function rowWeights<T extends number>(job: usize, t: f64, y: f64, width: f64, first: i32, n: i32, outPtr: usize): void {
  const shape = pointer(job, Word.shape);
  if (shape == 0) {
    gaussianAtNode<T>(pointer(job, Word.shapeTable), y, width, first, n, outPtr);
    return;
  }
  const ny = count(job, Word.ny);
  const across: f64 = ny > 1 ? (2.0 * y) / <f64>(ny - 1) - 1.0 : 0.0;
  shapeWeights<T>(shape, pointer(job, Word.shapeTable), t, across, y, width, first, n, outPtr);
}

/** Where a node lies on the series' interval [−1, 1]; a single column sits at 0. */
function nodeArgument(job: usize, x0: i32, node: i32): f64 {
  const nx = count(job, Word.nx);
  if (nx < 2) return 0.0;
  return (2.0 * (<f64>x0 + nodeOffset(count(job, Word.blockColumns), node))) / <f64>(nx - 1) - 1.0;
}

/** Weights and centres of fibres k0 … k1 − 1 in the group of columns that begins `offset` columns into the block, and
 * Word.crowd on the rows that they alone light. */
export function interpolateProfiles<T extends number>(job: usize, offset: i32, k0: i32, k1: i32): void {
  const nWindow = windowRows(job);
  const blockColumns = count(job, Word.blockColumns);
  const shares = pointer(job, Word.nodeShares) + <usize>offset * sizeof<T>();
  const nodeBytes = <usize>nWindow * sizeof<T>();
  const nNode = nodeCount(blockColumns);
  const crowd = pointer(job, Word.crowd);
  const centres = pointer(job, Word.centre);
  const nodeCentres = pointer(job, Word.nodeCentre);
  let weightsAt = pointer(job, Word.weights) + ((<usize>(k0 * nWindow)) << 4);
  let nodesAt = pointer(job, Word.nodeWeights) + <usize>(k0 * nNode) * nodeBytes;
  const crowded = windowOffset(job, k1 - 1) + ((<usize>nWindow) << 4);
  memory.fill(crowd + windowOffset(job, k0), 0, crowded - windowOffset(job, k0));
  const stride = <usize>blockColumns * sizeof<T>();
  const share0 = v128.load(shares);
  const share1 = v128.load(shares + stride);
  const share2 = v128.load(shares + 2 * stride);
  const share3 = v128.load(shares + 3 * stride);
  const share4 = nNode == 6 ? v128.load(shares + 4 * stride) : spread<T>(0);
  const share5 = nNode == 6 ? v128.load(shares + 5 * stride) : spread<T>(0);
  for (let k = k0; k < k1; k++) {
    let rowAt = crowd + windowOffset(job, k);
    for (let i: i32 = 0; i < nWindow; i++) {
      let weight = cubic<T>(nodesAt, nodeBytes, share0, share1, share2, share3);
      if (nNode == 6) weight = further<T>(weight, nodesAt + 4 * nodeBytes, nodeBytes, share4, share5);
      v128.store(weightsAt, weight);
      v128.store(rowAt, v128.add<T>(v128.load(rowAt), weight));
      weightsAt += 16;
      rowAt += 16;
      nodesAt += sizeof<T>();
    }
    nodesAt += <usize>(nNode - 1) * nodeBytes;
    const at = nodeCentres + <usize>(nNode * k) * sizeof<T>();
    let centre = cubic<T>(at, sizeof<T>(), share0, share1, share2, share3);
    if (nNode == 6) centre = further<T>(centre, at + 4 * sizeof<T>(), sizeof<T>(), share4, share5);
    v128.store(centres + ((<usize>k) << 4), centre);
  }
}

/** Weights of the wings of fibres k0 … k1 − 1 in the four columns of which one is `offset` columns into the block: a line
 * through two of the nodes, at the middle of the four. Smooth as wings are, that is near enough to every one. */
export function interpolateWings<T extends number>(job: usize, offset: i32, k0: i32, k1: i32): void {
  const wingBytes: usize = <usize>(2 * count(job, Word.wing)) * sizeof<T>();
  if (wingBytes == 0) return;
  const blockColumns = count(job, Word.blockColumns);
  const first = nodeOffset(blockColumns, wingNode(blockColumns, 0));
  const last = nodeOffset(blockColumns, wingNode(blockColumns, 1));
  const share: f64 = (<f64>(offset & ~3) + 1.5 - first) / (last - first);
  const ofFirst = spread<T>(1.0 - share);
  const ofLast = spread<T>(share);
  let out = pointer(job, Word.wingWeights) + <usize>k0 * wingBytes;
  let nodes = pointer(job, Word.wingNodes) + <usize>k0 * 2 * wingBytes;
  for (let k = k0; k < k1; k++) {
    for (let at: usize = 0; at < wingBytes; at += 16) {
      const a = v128.mul<T>(ofFirst, v128.load(nodes + at));
      v128.store(out + at, v128.add<T>(a, v128.mul<T>(ofLast, v128.load(nodes + wingBytes + at))));
    }
    out += wingBytes;
    nodes += 2 * wingBytes;
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

function further<T extends number>(sum: v128, ptr: usize, stride: usize, s4: v128, s5: v128): v128 {
  const next = v128.add<T>(sum, v128.mul<T>(s4, loadSpread<T>(ptr)));
  return v128.add<T>(next, v128.mul<T>(s5, loadSpread<T>(ptr + stride)));
}
