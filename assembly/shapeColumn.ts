/** Joint fits of single columns, two at a time in the lanes: every fibre's flux, with variances that follow from the model, and
 * then as many local unknowns of every fibre as are asked for. src/reference/shapeColumn.ts is the same for one column.
 *
 * The columns' windows differ, so that each lane's numbers are made on their own; the banded systems are solved together.
 * Designs and residuals are multiplied by the root of the inverse variance: normal equations are then plain products. */
import { factorBand, inverseBand, solveBand } from "./banded";
import { columnOf, count, firstOf, nLane, number, pointer, rowOf, ShapeNumbers, ShapeWord } from "./shapeJob";
import { fillProfiles } from "./shapeProfiles";

/** Fluxes from the data's own noise first, then so many times from the model's. */
const rounds: i32 = 2;

/** Two columns' fluxes, models and inverse variances, and their fibres' local unknowns with variances. */
export function fitShapeColumns(job: usize, tile: i32): void {
  settleColumns(job, tile);
  const nPar = count(job, ShapeWord.nPar);
  const n = nPar * count(job, ShapeWord.nFibre);
  const b = bandwidthOf(job, nPar);
  for (let lane: i32 = 0; lane < nLane; lane++) {
    leaveResidual(job, columnOf(job, tile, lane), lane);
    fillLocalDesign(job, columnOf(job, tile, lane), lane, nPar);
    fillSystem(job, lane, nPar);
  }
  const band = pointer(job, ShapeWord.band);
  const inverse = pointer(job, ShapeWord.inverse);
  factorBand<f64>(band, n, b);
  solveBand<f64>(band, n, b, pointer(job, ShapeWord.rhs));
  inverseBand<f64>(band, n, b, inverse);
  for (let lane: i32 = 0; lane < nLane; lane++) {
    const column = columnOf(job, tile, lane);
    takeLane(pointer(job, ShapeWord.rhs), 1, lane, n, rowOf(job, ShapeWord.solution, column, n));
    takeLane(inverse, b + 1, lane, n, rowOf(job, ShapeWord.solutionVariance, column, n));
  }
}

/** Fluxes, models and inverse variances of a tile's columns; profiles and roots of the inverse variances stay in the scratch. */
export function settleColumns(job: usize, tile: i32): void {
  const nFibre = count(job, ShapeWord.nFibre);
  const b = bandwidthOf(job, 1);
  for (let lane: i32 = 0; lane < nLane; lane++) {
    fillProfiles(job, columnOf(job, tile, lane), lane);
    fillLevel(job, columnOf(job, tile, lane), lane);
  }
  for (let round: i32 = 0; round <= rounds; round++) {
    for (let lane: i32 = 0; lane < nLane; lane++) {
      weigh(job, columnOf(job, tile, lane), lane, round == 0);
      fillLocalDesign(job, columnOf(job, tile, lane), lane, 1);
      fillSystem(job, lane, 1);
    }
    factorBand<f64>(pointer(job, ShapeWord.band), nFibre, b);
    solveBand<f64>(pointer(job, ShapeWord.band), nFibre, b, pointer(job, ShapeWord.rhs));
    for (let lane: i32 = 0; lane < nLane; lane++) {
      const flux = rowOf(job, ShapeWord.flux, columnOf(job, tile, lane), nFibre);
      takeLane(pointer(job, ShapeWord.rhs), 1, lane, nFibre, flux);
      fillModel(job, columnOf(job, tile, lane), lane, flux);
    }
  }
}

/** Half-bandwidth of the system of `nPar` unknowns a fibre. */
export function bandwidthOf(job: usize, nPar: i32): i32 {
  return nPar * (count(job, ShapeWord.neighbours) + 1) - 1;
}

/** The first of each `stride` v128, of one lane. */
function takeLane(from: usize, stride: i32, lane: i32, n: i32, out: usize): void {
  from += (<usize>lane) << 3;
  for (let i: i32 = 0; i < n; i++) {
    store<f64>(out + ((<usize>i) << 3), load<f64>(from + ((<usize>i * <usize>stride) << 4)));
  }
}

/** Light without the background. */
function fillLevel(job: usize, column: i32, lane: i32): void {
  const ny = count(job, ShapeWord.ny);
  const light = rowOf(job, ShapeWord.light, column, ny);
  const level = rowOf(job, ShapeWord.level, lane, ny);
  for (let y: i32 = 0; y < ny; y++) {
    const at = (<usize>y) << 3;
    store<f64>(level + at, load<f64>(light + at) - backgroundAt(job, column, y));
  }
}

function backgroundAt(job: usize, column: i32, y: i32): f64 {
  const n = count(job, ShapeWord.nBackground);
  const series = rowOf(job, ShapeWord.backgroundSeries, column, n);
  const inY = rowOf(job, ShapeWord.rowPolynomials, y, n);
  let sum: f64 = 0.0;
  for (let at: usize = 0; at < (<usize>n) << 3; at += 8) sum += load<f64>(series + at) * load<f64>(inY + at);
  return sum;
}

/** Inverse variances and their roots from the data's light, or from the model with the background. */
function weigh(job: usize, column: i32, lane: i32, fromData: bool): void {
  const ny = count(job, ShapeWord.ny);
  const modelError = number(job, ShapeNumbers.modelError);
  const light = rowOf(job, ShapeWord.light, column, ny);
  const model = rowOf(job, ShapeWord.model, column, ny);
  const level = rowOf(job, ShapeWord.level, lane, ny);
  const fixed = rowOf(job, ShapeWord.fixedVariance, column, ny);
  const perElectron = rowOf(job, ShapeWord.variancePerElectron, column, ny);
  const inverseVariance = rowOf(job, ShapeWord.inverseVariance, column, ny);
  const rootWeight = rowOf(job, ShapeWord.rootWeight, lane, ny);
  const scaled = rowOf(job, ShapeWord.scaled, lane, ny);
  for (let at: usize = 0; at < (<usize>ny) << 3; at += 8) {
    const data = load<f64>(light + at);
    const seen = max(fromData ? data : load<f64>(model + at) + (data - load<f64>(level + at)), 0.0);
    const missed = modelError * seen;
    const inverse = 1.0 / (load<f64>(fixed + at) + seen * load<f64>(perElectron + at) + missed * missed);
    const root = sqrt(inverse);
    store<f64>(inverseVariance + at, inverse);
    store<f64>(rootWeight + at, root);
    store<f64>(scaled + at, root * load<f64>(level + at));
  }
}

/** What the fluxes leave, over its noise, in place of the level over its noise. */
export function leaveResidual(job: usize, column: i32, lane: i32): void {
  const ny = count(job, ShapeWord.ny);
  const level = rowOf(job, ShapeWord.level, lane, ny);
  const model = rowOf(job, ShapeWord.model, column, ny);
  const rootWeight = rowOf(job, ShapeWord.rootWeight, lane, ny);
  const scaled = rowOf(job, ShapeWord.scaled, lane, ny);
  for (let at: usize = 0; at < (<usize>ny) << 3; at += 8) {
    store<f64>(scaled + at, load<f64>(rootWeight + at) * (load<f64>(level + at) - load<f64>(model + at)));
  }
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

/** Σ f P on every row. */
function fillModel(job: usize, column: i32, lane: i32, flux: usize): void {
  const nFibre = count(job, ShapeWord.nFibre);
  const n = count(job, ShapeWord.nWindow);
  const ny = count(job, ShapeWord.ny);
  const model = rowOf(job, ShapeWord.model, column, ny);
  memory.fill(model, 0, (<usize>ny) << 3);
  for (let k: i32 = 0; k < nFibre; k++) {
    const first = load<i32>(firstOf(job, lane) + ((<usize>k) << 2));
    const own = rowOf(job, ShapeWord.weights, lane * nFibre + k, n);
    const f = f64x2.splat(load<f64>(flux + ((<usize>k) << 3)));
    let i = max(0, -first);
    const to = min(n, ny - first);
    let at = model + ((<usize>(first + i)) << 3);
    for (; i + 2 <= to; i += 2) {
      v128.store(at, f64x2.add(v128.load(at), f64x2.mul(f, v128.load(own + ((<usize>i) << 3)))));
      at += 16;
    }
    if (i < to) store<f64>(at, load<f64>(at) + f64x2.extract_lane(f, 0) * load<f64>(own + ((<usize>i) << 3)));
  }
}
