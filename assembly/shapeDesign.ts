/** Derivatives of one column's rows by a shape's coefficients and a background, and the rows' residuals, over their noise;
 * src/reference/shapeNormal.ts has them as it needs them.
 *
 *     row:   spline 0: 1 y P₂(y) width | spline 1 … | P₀(y) … P₃(y) | P₄(y) residual 0 0 */
import { count, firstOf, number, pointer, rowOf, ShapeNumbers, ShapeWord } from "./shapeJob";
import { fibreNumbers } from "./shapeProfiles";

/** Fills ShapeWord.design: [ny × 4·(nSpline + 2)]. */
export function fillDesign(job: usize, column: i32, lane: i32): void {
  const ny = count(job, ShapeWord.ny);
  const nFibre = count(job, ShapeWord.nFibre);
  const nSpline = count(job, ShapeWord.nSpline);
  const rowBytes = (<usize>(nSpline + 2)) << 5;
  const design = pointer(job, ShapeWord.design);
  memory.fill(design, 0, <usize>ny * rowBytes);
  for (let k: i32 = 0; nSpline > 0 && k < nFibre; k++) addFibre(job, column, lane, k, rowBytes);
  const rootWeight = rowOf(job, ShapeWord.rootWeight, lane, ny);
  const scaled = rowOf(job, ShapeWord.scaled, lane, ny);
  const nBackground = count(job, ShapeWord.nBackground);
  for (let y: i32 = 0; y < ny; y++) {
    const root = load<f64>(rootWeight + ((<usize>y) << 3));
    const roots = f64x2.splat(root);
    const row = design + <usize>y * rowBytes;
    const splinesEnd = row + ((<usize>nSpline) << 5);
    for (let at = row; at < splinesEnd; at += 16) v128.store(at, f64x2.mul(roots, v128.load(at)));
    const inY = rowOf(job, ShapeWord.rowPolynomials, y, nBackground);
    for (let at: usize = 0; at < (<usize>nBackground) << 3; at += 8) {
      store<f64>(splinesEnd + at, root * load<f64>(inY + at));
    }
    store<f64>(splinesEnd + ((<usize>nBackground) << 3), load<f64>(scaled + ((<usize>y) << 3)));
  }
}

/** Light of fibre k in each spline and term, on the rows of its window. */
function addFibre(job: usize, column: i32, lane: i32, k: i32, rowBytes: usize): void {
  const nFibre = count(job, ShapeWord.nFibre);
  const n = count(job, ShapeWord.nWindow);
  const fibre = rowOf(job, ShapeWord.fibre, lane * nFibre + k, fibreNumbers);
  const flux = load<f64>(rowOf(job, ShapeWord.flux, column, nFibre) + ((<usize>k) << 3));
  const low = f64x2.replace_lane(f64x2.splat(flux), 1, flux * load<f64>(fibre));
  const high = f64x2.replace_lane(f64x2.splat(flux * load<f64>(fibre, 8)), 1, flux * load<f64>(fibre, 16));
  const first = load<i32>(firstOf(job, lane) + ((<usize>k) << 2));
  const from = max(first, 0);
  const to = min(first + n, count(job, ShapeWord.ny));
  const step = number(job, ShapeNumbers.tableStep);
  const scale = load<f64>(fibre, 32) / step;
  const origin = (load<f64>(fibre, 24) - number(job, ShapeNumbers.tableStart)) / step;
  const centre = load<f64>(fibre, 40);
  const edgeBytes = (<usize>(count(job, ShapeWord.nSpline) + 2)) << 3;
  let below = pointer(job, ShapeWord.edges);
  let above = below + edgeBytes;
  memory.fill(below, 0, 2 * edgeBytes);
  let firstBegun = edgeAt(job, (<f64>from - 0.5 - centre) * scale + origin, below);
  let row = pointer(job, ShapeWord.design) + <usize>from * rowBytes;
  for (let y = from; y < to; y++) {
    const begun = edgeAt(job, (<f64>y + 0.5 - centre) * scale + origin, above);
    const lastBegun = begun >> 16;
    for (let j = firstBegun & 0xffff; j <= lastBegun; j++) {
      const at = (<usize>j) << 3;
      const light = f64x2.splat(load<f64>(above + at) - load<f64>(below + at));
      const out = row + (at << 2);
      v128.store(out, f64x2.add(v128.load(out), f64x2.mul(light, low)));
      v128.store(out, f64x2.add(v128.load(out, 16), f64x2.mul(light, high)), 16);
    }
    firstBegun = begun;
    const spare = below;
    below = above;
    above = spare;
    row += rowBytes;
  }
}

/** Integrals of all splines up to `place`, in steps of the table, by Hermite's cubic. `out`: [nSpline], what an edge further
 * down left, or 0. Returns the first spline that is not whole, and the last that has begun, times 2¹⁶. */
function edgeAt(job: usize, place: f64, out: usize): i32 {
  const last = count(job, ShapeWord.nTable) - 2;
  const nSpline = count(job, ShapeWord.nSpline);
  const held = min(max(place, 0.0), <f64>(last + 1));
  const cell = min(<i32>held, last);
  const t = held - <f64>cell;
  const u = 1.0 - t;
  const step = number(job, ShapeNumbers.tableStep);
  const smooth = f64x2.splat(t * t * (3.0 - 2.0 * t));
  const riseHere = f64x2.splat(step * t * u * u);
  const riseThere = f64x2.splat(step * t * u * t);
  const values = rowOf(job, ShapeWord.basis, cell, 2 * nSpline);
  const slopes = values + ((<usize>nSpline) << 3);
  const nextBytes = (<usize>nSpline) << 4;
  const begun = pointer(job, ShapeWord.begun) + ((<usize>cell) << 3);
  const first = load<i32>(begun);
  const lastBegun = load<i32>(begun, 4);
  const whole = pointer(job, ShapeWord.whole);
  for (let j: i32 = first - 1; j >= 0; j--) {
    const at = (<usize>j) << 3;
    if (load<f64>(out + at) == load<f64>(whole + at)) break; // and so are those before it
    store<f64>(out + at, load<f64>(whole + at));
  }
  // Pairs may run one spline further, which has not begun, or past the last one.
  for (let j = first; j <= lastBegun; j += 2) {
    const at = (<usize>j) << 3;
    const c0 = v128.load(values + at);
    const rise = f64x2.sub(
      f64x2.mul(riseHere, v128.load(slopes + at)),
      f64x2.mul(riseThere, v128.load(slopes + nextBytes + at)),
    );
    const change = f64x2.mul(smooth, f64x2.sub(v128.load(values + nextBytes + at), c0));
    v128.store(out + at, f64x2.add(c0, f64x2.add(change, rise)));
  }
  return first | (lastBegun << 16);
}
