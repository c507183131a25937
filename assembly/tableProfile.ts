/** Profiles of all fibres in a group of four columns, and their slopes by the centre, from a table of the cumulative shape
 * (src/reference/shape.ts) in f32. The table is looked up once an edge of a pixel, at the group's middle, with the width there;
 * a column's own centre, hundredths of a pixel away, follows on the same cubic. Error 1e-6 of the flux, for lines that move by
 * less than 0.05 px a column; 1e-5 at 0.1 px. */
import { ColumnNumber, ColumnWord } from "../src/kernels/columnFit-words";
import { columnArgument, count, number, pointer } from "./columnFit";
import { spread } from "./lanes";
import { legendreBasis } from "./legendre";

const widthUnit: f64 = 0.05;

/** Fills start, weights and, where shifts are wanted, slopes for the columns x0 … x0 + 3. */
export function tableProfiles(job: usize, x0: i32): void {
  const nTrace = count(job, ColumnWord.nTrace);
  const nWidth = count(job, ColumnWord.nWidth);
  const ny = count(job, ColumnWord.ny);
  const basisBytes = (<usize>max(nTrace, nWidth)) << 3;
  const columns = pointer(job, ColumnWord.series);
  const middle = columns + 4 * basisBytes;
  for (let lane: i32 = 0; lane < 4; lane++) {
    legendreBasis(columnArgument(job, <f64>(x0 + lane)), nTrace, columns + <usize>lane * basisBytes);
  }
  const t = columnArgument(job, <f64>x0 + 1.5);
  legendreBasis(t, nWidth, middle);
  let trace = pointer(job, ColumnWord.trace);
  let width = pointer(job, ColumnWord.width);
  for (let k: i32 = 0; k < count(job, ColumnWord.nFibre); k++) {
    const y0 = dot(trace, columns, nTrace);
    const y1 = dot(trace, columns + basisBytes, nTrace);
    const y2 = dot(trace, columns + 2 * basisBytes, nTrace);
    const y3 = dot(trace, columns + 3 * basisBytes, nTrace);
    const centre = 0.25 * (y0 + y1 + y2 + y3);
    const y: f64 = ny > 1 ? (2.0 * centre) / <f64>(ny - 1) - 1.0 : 0.0;
    const own = f32x4(<f32>(centre - y0), <f32>(centre - y1), <f32>(centre - y2), <f32>(centre - y3));
    placeFibre(job, k, t, y, centre, own, dot(width, middle, nWidth));
    trace += (<usize>nTrace) << 3;
    width += (<usize>nWidth) << 3;
  }
}

function dot(coefficients: usize, basis: usize, n: i32): f64 {
  let sum: f64 = 0.0;
  for (let at: usize = 0; at < (<usize>n) << 3; at += 8) sum += load<f64>(coefficients + at) * load<f64>(basis + at);
  return sum;
}

/** `above`: pixels by which the middle `centre` lies above each column's own. */
function placeFibre(job: usize, k: i32, x: f64, y: f64, centre: f64, above: v128, width: f64): void {
  const nWindow = count(job, ColumnWord.nWindow);
  const start = min(
    max(<i32>floor(min(max(centre, -1e6), 1e6) + 0.5) - (nWindow >> 1), -nWindow),
    count(job, ColumnWord.ny),
  );
  store<i32>(pointer(job, ColumnWord.start) + ((<usize>k) << 2), start);
  const reference = number(job, ColumnNumber.referenceWidth);
  const step = number(job, ColumnNumber.tableStep);
  const relative = (width / reference - 1.0) / widthUnit;
  const lowTerms = f32x4(1, <f32>x, <f32>(1.5 * x * x - 0.5), <f32>y);
  const highTerms = f32x4(<f32>(1.5 * y * y - 0.5), <f32>(x * y), <f32>relative, 0);
  const scale = reference / width / step; // cells a pixel
  const origin = (centroid(job, x, y, relative) - number(job, ColumnNumber.tableStart)) / step;
  const own = f32x4.mul(spread<f32>(scale), above);
  const wantSlopes = count(job, ColumnWord.wantShift) != 0;
  const perPixel = spread<f32>(scale);
  const edges = pointer(job, ColumnWord.edges);
  let weights = pointer(job, ColumnWord.weights) + ((<usize>k * <usize>nWindow) << 4);
  let slopes = pointer(job, ColumnWord.slopes) + ((<usize>k * <usize>nWindow) << 4);
  let at = (<f64>start - 0.5 - centre) * scale + origin;
  edge(job, at, own, lowTerms, highTerms, edges);
  for (let i: i32 = 0; i < nWindow; i++) {
    const below = v128.load(edges);
    const slopeBelow = v128.load(edges, 16);
    at += scale;
    edge(job, at, own, lowTerms, highTerms, edges);
    v128.store(weights, f32x4.sub(v128.load(edges), below));
    weights += 16;
    if (!wantSlopes) continue;
    v128.store(slopes, f32x4.mul(perPixel, f32x4.sub(slopeBelow, v128.load(edges, 16))));
    slopes += 16;
  }
}

function centroid(job: usize, x: f64, y: f64, relative: f64): f64 {
  const at = pointer(job, ColumnWord.numbers) + ((<usize>ColumnNumber.centroid) << 3);
  return (
    load<f64>(at) +
    x * load<f64>(at, 8) +
    (1.5 * x * x - 0.5) * load<f64>(at, 16) +
    y * load<f64>(at, 24) +
    (1.5 * y * y - 0.5) * load<f64>(at, 32) +
    x * y * load<f64>(at, 40) +
    relative * load<f64>(at, 48)
  );
}

/** C and its slope, per cell, at `at` cells into the table and each lane's own distance from there. `out`: 2 v128. */
function edge(job: usize, at: f64, own: v128, lowTerms: v128, highTerms: v128, out: usize): void {
  const last = count(job, ColumnWord.nPoint) - 1;
  const inside = at > 0.0 && at < <f64>last;
  const cell = inside ? <i32>at : at > 0.0 ? last - 1 : 0;
  const row = pointer(job, ColumnWord.table) + ((<usize>cell) << 6);
  const points = sums(
    f32x4.add(f32x4.mul(lowTerms, v128.load(row)), f32x4.mul(highTerms, v128.load(row, 16))),
    f32x4.add(f32x4.mul(lowTerms, v128.load(row, 32)), f32x4.mul(highTerms, v128.load(row, 48))),
    f32x4.add(f32x4.mul(lowTerms, v128.load(row, 64)), f32x4.mul(highTerms, v128.load(row, 80))),
    f32x4.add(f32x4.mul(lowTerms, v128.load(row, 96)), f32x4.mul(highTerms, v128.load(row, 112))),
  );
  const c0 = f32x4.extract_lane(points, 0);
  if (!inside) {
    v128.store(out, f32x4.splat(at > 0.0 ? f32x4.extract_lane(points, 2) : c0));
    v128.store(out, spread<f32>(0), 16);
    return;
  }
  const d0 = f32x4.extract_lane(points, 1);
  const rise = f32x4.extract_lane(points, 2) - c0;
  const d1 = f32x4.extract_lane(points, 3);
  const square = f32x4.splat(3 * rise - 2 * d0 - d1);
  const cube = f32x4.splat(d0 + d1 - 2 * rise);
  const first = f32x4.splat(d0);
  const t = f32x4.add(f32x4.splat(<f32>(at - <f64>cell)), own);
  const bend = f32x4.add(square, f32x4.mul(t, cube));
  v128.store(out, f32x4.add(f32x4.splat(c0), f32x4.mul(t, f32x4.add(first, f32x4.mul(t, bend)))));
  const twice = f32x4.add(f32x4.add(bend, bend), f32x4.mul(t, cube));
  v128.store(out, f32x4.add(first, f32x4.mul(t, twice)), 16);
}

/** The four sums over lanes, one in each lane. */
function sums(a: v128, b: v128, c: v128, d: v128): v128 {
  const ab = f32x4.add(v128.shuffle<f32>(a, b, 0, 4, 1, 5), v128.shuffle<f32>(a, b, 2, 6, 3, 7));
  const cd = f32x4.add(v128.shuffle<f32>(c, d, 0, 4, 1, 5), v128.shuffle<f32>(c, d, 2, 6, 3, 7));
  return f32x4.add(v128.shuffle<f32>(ab, cd, 0, 1, 4, 5), v128.shuffle<f32>(ab, cd, 2, 3, 6, 7));
}
