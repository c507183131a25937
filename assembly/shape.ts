/** A profile of any form from a table; src/reference/shape.ts gives the equations.
 *
 *     shapePtr →  start, step, n, referenceWidth, centroid_0 … centroid_6         f64 each
 *     then a row for each of the n points:  C_0 … C_6, slopes c_0 … c_6           f64 each
 *
 * In one column x is the same for all fibres, so that the seven terms become four:
 *
 *     1, y, P₂(y) and the width,   with tables C₀ + x C₁ + P₂(x) C₂,   C₃ + x C₅,   C₄,   C₆
 *
 *     tablePtr →  for each point:  value slope │ value slope │ value slope │ value slope      f64, a v128 each pair */

export const nShapeTerm: i32 = 7;
const headNumbers: i32 = 11;
export const widthUnit: f64 = 0.05;
/** Numbers of a point in the table of a column. */
export const tableNumbers: i32 = 8;
const rowBytes: usize = 64;

/** Points of the table. */
export function shapePoints(shapePtr: usize): i32 {
  return <i32>load<f64>(shapePtr, 16);
}

/** Where the numbers of a shape's points begin. */
export function shapeValues(shapePtr: usize): usize {
  return shapePtr + ((<usize>headNumbers) << 3);
}

/** The table for x ∈ [−1, 1] over the frame, from the `n` points at `from`. `tablePtr`: n × tableNumbers f64. */
export function shapeAtColumn(from: usize, n: i32, x: f64, tablePtr: usize): void {
  const bent = 1.5 * x * x - 0.5;
  let out = tablePtr;
  for (let i = n; i > 0; i--) {
    for (let slope: usize = 0; slope < 16; slope += 8) {
      const row = from + (slope == 0 ? 0 : (<usize>nShapeTerm) << 3);
      store<f64>(out + slope, load<f64>(row) + x * load<f64>(row, 8) + bent * load<f64>(row, 16));
      store<f64>(out + slope, load<f64>(row, 24) + x * load<f64>(row, 40), 16);
      store<f64>(out + slope, load<f64>(row, 32), 32);
      store<f64>(out + slope, load<f64>(row, 48), 48);
    }
    from += (<usize>nShapeTerm) << 4;
    out += rowBytes;
  }
}

/** Light of the profile on pixels `first` … `first + n − 1`; x, y ∈ [−1, 1] over the frame, centre and width in pixels.
 * `tablePtr`: of `shapeAtColumn` for that x; `outPtr`: n of T. */
export function shapeWeights<T extends number>(
  shapePtr: usize,
  tablePtr: usize,
  x: f64,
  y: f64,
  centre: f64,
  width: f64,
  first: i32,
  n: i32,
  outPtr: usize,
): void {
  const reference = load<f64>(shapePtr, 24);
  const scale = reference / width;
  const bent = 1.5 * y * y - 0.5;
  const wide = (width / reference - 1.0) / widthUnit;
  const inY = f64x2.splat(y);
  const inBent = f64x2.splat(bent);
  const inWidth = f64x2.splat(wide);
  const origin = centroid(shapePtr, x, y, bent, wide);
  const step = load<f64>(shapePtr, 8);
  const perStep = 1.0 / step;
  const start = load<f64>(shapePtr);
  const last = shapePoints(shapePtr) - 2;
  let below = cumulative(
    tablePtr,
    start,
    step,
    last,
    inY,
    inBent,
    inWidth,
    perStep,
    (<f64>first - 0.5 - centre) * scale + origin,
  );
  for (let i: i32 = 0; i < n; i++) {
    const v = (<f64>(first + i) + 0.5 - centre) * scale + origin;
    const above = cumulative(tablePtr, start, step, last, inY, inBent, inWidth, perStep, v);
    store<T>(outPtr + <usize>i * sizeof<T>(), <T>(above - below));
    below = above;
  }
}

/** v of the profile's centroid. */
function centroid(shapePtr: usize, x: f64, y: f64, bent: f64, wide: f64): f64 {
  const inX = load<f64>(shapePtr, 32) + x * load<f64>(shapePtr, 40) + (1.5 * x * x - 0.5) * load<f64>(shapePtr, 48);
  const inY = load<f64>(shapePtr, 56) + x * load<f64>(shapePtr, 72);
  return inX + y * inY + bent * load<f64>(shapePtr, 64) + wide * load<f64>(shapePtr, 80);
}

/** C(v) by Hermite's cubic between the table's points. */
function cumulative(
  tablePtr: usize,
  start: f64,
  step: f64,
  last: i32,
  inY: v128,
  inBent: v128,
  inWidth: v128,
  perStep: f64,
  v: f64,
): f64 {
  const at = (v - start) * perStep;
  const cell = <i32>min(max(at, 0.0), <f64>last);
  const t = min(max(at - <f64>cell, 0.0), 1.0);
  const here = told(tablePtr + <usize>cell * rowBytes, inY, inBent, inWidth);
  const there = told(tablePtr + <usize>(cell + 1) * rowBytes, inY, inBent, inWidth);
  const c0 = f64x2.extract_lane(here, 0);
  const d0 = f64x2.extract_lane(here, 1);
  const c1 = f64x2.extract_lane(there, 0);
  const d1 = f64x2.extract_lane(there, 1);
  const u = 1.0 - t;
  return c0 + t * t * (3.0 - 2.0 * t) * (c1 - c0) + step * t * u * (u * d0 - t * d1);
}

/** Value and slope of a point of the table for one fibre. */
function told(ptr: usize, inY: v128, inBent: v128, inWidth: v128): v128 {
  let sum = f64x2.add(v128.load(ptr), f64x2.mul(inY, v128.load(ptr, 16)));
  sum = f64x2.add(sum, f64x2.mul(inBent, v128.load(ptr, 32)));
  return f64x2.add(sum, f64x2.mul(inWidth, v128.load(ptr, 48)));
}
