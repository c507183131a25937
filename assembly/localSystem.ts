/** Normal equations of one column's pixels in the local unknowns of its fibres: flux, and flux times shift, and flux times change
 * of width, as far as asked for. src/reference/localSystem.ts is the same. The columns of a tile have windows of their own, so
 * each fills its lane of the band alone. */
import { count, firstOf, pointer, rowOf, ShapeWord } from "./shapeJob";

/** Half-bandwidth of the system of `nPar` unknowns a fibre. */
export function bandwidthOf(job: usize, nPar: i32): i32 {
  return nPar * (count(job, ShapeWord.neighbours) + 1) - 1;
}

/** First and last + 1 row of window k that its local unknowns reach, on the frame. */
export function localFrom(job: usize, first: i32): i32 {
  return max(count(job, ShapeWord.margin), -first);
}

export function localTo(job: usize, first: i32): i32 {
  return min(count(job, ShapeWord.nWindow) - count(job, ShapeWord.margin), count(job, ShapeWord.ny) - first);
}

/** Derivatives of the pixels by flux, shift and width over the pixels' noise: [nFibre × nPar × nWindow]. */
export function fillLocalDesign(job: usize, column: i32, lane: i32, nPar: i32): void {
  const nFibre = count(job, ShapeWord.nFibre);
  const n = count(job, ShapeWord.nWindow);
  const windowBytes = (<usize>n) << 3;
  const rootWeight = rowOf(job, ShapeWord.rootWeight, lane, count(job, ShapeWord.ny));
  const flux = rowOf(job, ShapeWord.flux, column, nFibre);
  let out = rowOf(job, ShapeWord.local, lane, nFibre * count(job, ShapeWord.nPar) * n);
  let own = rowOf(job, ShapeWord.weights, lane, nFibre * n);
  const toCentre = pointer(job, ShapeWord.byCentre) - pointer(job, ShapeWord.weights);
  const toWidth = pointer(job, ShapeWord.byWidth) - pointer(job, ShapeWord.weights);
  for (let k: i32 = 0; k < nFibre; k++) {
    const first = load<i32>(firstOf(job, lane) + ((<usize>k) << 2));
    const from = localFrom(job, first);
    const to = localTo(job, first);
    const f = nPar > 1 ? load<f64>(flux + ((<usize>k) << 3)) : 1.0;
    for (let i = from; i < to; i++) {
      const at = (<usize>i) << 3;
      const root = load<f64>(rootWeight + ((<usize>(first + i)) << 3));
      store<f64>(out + at, root * load<f64>(own + at));
      if (nPar > 1) store<f64>(out + windowBytes + at, root * f * load<f64>(own + toCentre + at));
      if (nPar > 2) store<f64>(out + 2 * windowBytes + at, root * f * load<f64>(own + toWidth + at));
    }
    out += <usize>nPar * windowBytes;
    own += windowBytes;
  }
}

/** One lane of the normal equations of ShapeWord.scaled in the local unknowns; lane 0 first. */
export function fillSystem(job: usize, lane: i32, nPar: i32): void {
  const nFibre = count(job, ShapeWord.nFibre);
  const n = count(job, ShapeWord.nWindow);
  const neighbours = count(job, ShapeWord.neighbours);
  const rowBytes = (<usize>(bandwidthOf(job, nPar) + 1)) << 4;
  const parBytes = (<usize>n) << 3;
  const fibreBytes = <usize>nPar * parBytes;
  const scaled = rowOf(job, ShapeWord.scaled, lane, count(job, ShapeWord.ny));
  const firsts = firstOf(job, lane);
  const laneBytes = (<usize>lane) << 3;
  let own = rowOf(job, ShapeWord.local, lane, nFibre * count(job, ShapeWord.nPar) * n);
  if (lane == 0) memory.fill(pointer(job, ShapeWord.band), 0, <usize>(nFibre * nPar) * rowBytes);
  for (let k: i32 = 0; k < nFibre; k++) {
    const first = load<i32>(firsts + ((<usize>k) << 2));
    const from = localFrom(job, first);
    const to = localTo(job, first);
    for (let p: i32 = 0; p < nPar; p++) {
      const i = <usize>(k * nPar + p);
      const mine = own + <usize>p * parBytes + ((<usize>from) << 3);
      const here = pointer(job, ShapeWord.band) + i * rowBytes + laneBytes;
      store<f64>(
        pointer(job, ShapeWord.rhs) + (i << 4) + laneBytes,
        product(mine, scaled + ((<usize>(first + from)) << 3), to - from),
      );
      for (let back: i32 = 0; back <= min(k, neighbours); back++) {
        const ahead = first - load<i32>(firsts + ((<usize>(k - back)) << 2));
        const low = max(from, count(job, ShapeWord.margin) - ahead);
        const nRow = min(to, n - count(job, ShapeWord.margin) - ahead) - low;
        const other = own - <usize>back * fibreBytes + ((<usize>(low + ahead)) << 3);
        const there = here + ((<usize>(back * nPar + p)) << 4);
        for (let q: i32 = back == 0 ? p : nPar - 1; q >= 0; q--) {
          store<f64>(
            there - ((<usize>q) << 4),
            product(mine + ((<usize>(low - from)) << 3), other + <usize>q * parBytes, nRow),
          );
        }
      }
    }
    own += fibreBytes;
  }
}

/** Σ a b over n numbers; 0 for none. */
function product(a: usize, b: usize, n: i32): f64 {
  let even = f64x2.splat(0.0);
  let odd = f64x2.splat(0.0);
  let i: i32 = 0;
  for (; i + 4 <= n; i += 4) {
    even = f64x2.add(even, f64x2.mul(v128.load(a), v128.load(b)));
    odd = f64x2.add(odd, f64x2.mul(v128.load(a, 16), v128.load(b, 16)));
    a += 32;
    b += 32;
  }
  even = f64x2.add(even, odd);
  let sum = f64x2.extract_lane(even, 0) + f64x2.extract_lane(even, 1);
  for (; i < n; i++) {
    sum += load<f64>(a) * load<f64>(b);
    a += 8;
    b += 8;
  }
  return sum;
}
