/** A profile of any form from a table; src/reference/shape.ts gives the equations.
 *
 *     shapePtr →  start, step, n, referenceWidth, centroid_0 … centroid_6         f64 each
 *     then a row for each of the n points:  C_0 … C_6, slopes c_0 … c_6           f64 each */

export const nShapeTerm: i32 = 7;
const headNumbers: i32 = 11;
export const widthUnit: f64 = 0.05;

/** Light of the profile on pixels `first` … `first + n − 1`; x, y ∈ [−1, 1] over the frame, centre and width in pixels.
 * `outPtr`: n of T; `termsPtr`: scratch of nShapeTerm f64. */
export function shapeWeights<T extends number>(
  shapePtr: usize,
  x: f64,
  y: f64,
  centre: f64,
  width: f64,
  first: i32,
  n: i32,
  outPtr: usize,
  termsPtr: usize,
): void {
  const scale = load<f64>(shapePtr, 24) / width;
  fillTerms(termsPtr, x, y, width / load<f64>(shapePtr, 24));
  let origin: f64 = 0.0;
  for (let m: usize = 0; m < (<usize>nShapeTerm) << 3; m += 8) {
    origin += load<f64>(termsPtr + m) * load<f64>(shapePtr + m, 32);
  }
  let below = cumulative(shapePtr, termsPtr, (<f64>first - 0.5 - centre) * scale + origin);
  for (let i: i32 = 0; i < n; i++) {
    const above = cumulative(shapePtr, termsPtr, (<f64>(first + i) + 0.5 - centre) * scale + origin);
    store<T>(outPtr + <usize>i * sizeof<T>(), <T>(above - below));
    below = above;
  }
}

function fillTerms(ptr: usize, x: f64, y: f64, relativeWidth: f64): void {
  store<f64>(ptr, 1.0);
  store<f64>(ptr, x, 8);
  store<f64>(ptr, 1.5 * x * x - 0.5, 16);
  store<f64>(ptr, y, 24);
  store<f64>(ptr, 1.5 * y * y - 0.5, 32);
  store<f64>(ptr, x * y, 40);
  store<f64>(ptr, (relativeWidth - 1.0) / widthUnit, 48);
}

/** C(v) by Hermite's cubic between the table's points. */
function cumulative(shapePtr: usize, termsPtr: usize, v: f64): f64 {
  const step = load<f64>(shapePtr, 8);
  const last = <i32>load<f64>(shapePtr, 16) - 2;
  const at = (v - load<f64>(shapePtr)) / step;
  const cell = min(max(<i32>floor(min(max(at, -1.0), <f64>last + 2.0)), 0), last);
  const t = min(max(at - <f64>cell, 0.0), 1.0);
  const row = shapePtr + ((<usize>headNumbers) << 3) + ((<usize>(cell * 2 * nShapeTerm)) << 3);
  let c0: f64 = 0.0;
  let c1: f64 = 0.0;
  let d0: f64 = 0.0;
  let d1: f64 = 0.0;
  for (let m: usize = 0; m < (<usize>nShapeTerm) << 3; m += 8) {
    const term = load<f64>(termsPtr + m);
    c0 += term * load<f64>(row + m);
    d0 += term * load<f64>(row + m, 56);
    c1 += term * load<f64>(row + m, 112);
    d1 += term * load<f64>(row + m, 168);
  }
  const u = 1.0 - t;
  return c0 + t * t * (3.0 - 2.0 * t) * (c1 - c0) + step * t * u * (u * d0 - t * d1);
}
