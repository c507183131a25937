/** Joint fits of single columns, two at a time in the lanes: every fibre's flux, with variances that follow from the model, and
 * then as many local unknowns of every fibre as are asked for. src/reference/shapeColumn.ts is the same for one column.
 *
 * The columns' windows differ, so that each lane's numbers are made on their own; the banded systems are solved together.
 * Designs and residuals are multiplied by the root of the inverse variance: normal equations are then plain products. */
import { factorBand, inverseBand, solveBand } from "./banded";
import { bandwidthOf, fillLocalDesign, fillSystem } from "./localSystem";
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
