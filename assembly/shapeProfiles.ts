/** Profiles of all fibres in one column with their slopes by centre and width; src/reference/shapeProfiles.ts gives the
 * equations.
 *
 *     columnTable: of shape.ts, for the column's x
 *     fibre:       for each fibre,  y  P₂(y)  width term  v of the centroid  scale  centre                       f64 each */

import { shapeAtColumn, tableNumbers, widthUnit } from "./shape";
import { count, firstOf, number, pointer, rowOf, ShapeNumbers, ShapeWord } from "./shapeJob";

export const fibreNumbers: i32 = 6;

/** Fills weights, slopes, first rows and the fibres' numbers of `lane` with those of `column`. */
export function fillProfiles(job: usize, column: i32, lane: i32): void {
  const nFibre = count(job, ShapeWord.nFibre);
  const x = load<f64>(rowOf(job, ShapeWord.argument, column, 1));
  const table = rowOf(job, ShapeWord.columnTable, lane, tableNumbers * count(job, ShapeWord.nTable));
  shapeAtColumn(pointer(job, ShapeWord.table), count(job, ShapeWord.nTable), x, table);
  const fibres = rowOf(job, ShapeWord.fibre, lane, fibreNumbers * nFibre);
  for (let k: i32 = 0; k < nFibre; k++) {
    const at = (<usize>(column * nFibre + k)) << 3;
    const centre = load<f64>(pointer(job, ShapeWord.centre) + at);
    const width = load<f64>(pointer(job, ShapeWord.width) + at);
    store<i32>(
      firstOf(job, lane) + ((<usize>k) << 2),
      <i32>floor(centre + 0.5) - ((count(job, ShapeWord.nWindow) - 1) >> 1),
    );
    const fibre = fibres + ((<usize>(k * fibreNumbers)) << 3);
    describeFibre(job, fibre, x, centre, width);
    fillProfile(job, lane, k, table, fibre, width);
  }
}

function describeFibre(job: usize, fibre: usize, x: f64, centre: f64, width: f64): void {
  const ny = count(job, ShapeWord.ny);
  const y = ny > 1 ? (2.0 * centre) / <f64>(ny - 1) - 1.0 : 0.0;
  const p2 = 1.5 * y * y - 0.5;
  const reference = number(job, ShapeNumbers.referenceWidth);
  const widthTerm = (width / reference - 1.0) / widthUnit;
  store<f64>(fibre, y);
  store<f64>(fibre, p2, 8);
  store<f64>(fibre, widthTerm, 16);
  const c = pointer(job, ShapeWord.centroid);
  const level = load<f64>(c) + x * load<f64>(c, 8) + (1.5 * x * x - 0.5) * load<f64>(c, 16);
  const inY = y * (load<f64>(c, 24) + x * load<f64>(c, 40)) + p2 * load<f64>(c, 32);
  store<f64>(fibre, level + inY + widthTerm * load<f64>(c, 48), 24);
  store<f64>(fibre, reference / width, 32);
  store<f64>(fibre, centre, 40);
}

/** C and its slope at every edge of the window by Hermite's cubic; their differences are the weights and slopes. */
function fillProfile(job: usize, lane: i32, k: i32, table: usize, fibre: usize, width: f64): void {
  const n = count(job, ShapeWord.nWindow);
  const last = count(job, ShapeWord.nTable) - 2;
  const start = number(job, ShapeNumbers.tableStart);
  const step = number(job, ShapeNumbers.tableStep);
  const inY = v128.load64_splat(fibre);
  const inP2 = v128.load64_splat(fibre, 8);
  const inWidth = v128.load64_splat(fibre, 16);
  const origin = load<f64>(fibre, 24);
  const scale = load<f64>(fibre, 32);
  const bottom = <f64>load<i32>(firstOf(job, lane) + ((<usize>k) << 2)) - 0.5 - load<f64>(fibre, 40);
  let at = (<usize>((lane * count(job, ShapeWord.nFibre) + k) * n)) << 3;
  let below: f64 = 0.0;
  let slopeBelow: f64 = 0.0;
  let momentBelow: f64 = 0.0;
  for (let i: i32 = 0; i <= n; i++) {
    const u = (bottom + <f64>i) * scale;
    const place = min(max((u + origin - start) / step, 0.0), <f64>(last + 1));
    const cell = min(<i32>place, last);
    const t = place - <f64>cell;
    const row = table + ((<usize>cell) << 6);
    const here = combine(row, inY, inP2, inWidth);
    const there = combine(row + 64, inY, inP2, inWidth);
    const c0 = f64x2.extract_lane(here, 0);
    const d0 = f64x2.extract_lane(here, 1);
    const rise = f64x2.extract_lane(there, 0) - c0;
    const d1 = f64x2.extract_lane(there, 1);
    const s = 1.0 - t;
    const above = c0 + t * t * (3.0 - 2.0 * t) * rise + step * t * s * (s * d0 - t * d1);
    const slope = (6.0 * t * s * rise) / step + s * (1.0 - 3.0 * t) * d0 + t * (3.0 * t - 2.0) * d1;
    if (i > 0) {
      store<f64>(pointer(job, ShapeWord.weights) + at, above - below);
      store<f64>(pointer(job, ShapeWord.byCentre) + at, -scale * (slope - slopeBelow));
      store<f64>(pointer(job, ShapeWord.byWidth) + at, -(u * slope - momentBelow) / width);
      at += 8;
    }
    below = above;
    slopeBelow = slope;
    momentBelow = u * slope;
  }
}

/** Value and slope of the cumulative shape at one point of the table. */
function combine(row: usize, inY: v128, inP2: v128, inWidth: v128): v128 {
  const low = f64x2.add(v128.load(row), f64x2.mul(inY, v128.load(row, 16)));
  return f64x2.add(low, f64x2.add(f64x2.mul(inP2, v128.load(row, 32)), f64x2.mul(inWidth, v128.load(row, 48))));
}
