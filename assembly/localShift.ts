/** Every fibre's own correction of flux and shift in a group of columns, jointly: what the fit leaves is a·P + f·δ·P′ to first
 * order, P′ the profile's derivative by its centre; linear in (a, δ), banded with two unknowns a fibre. The twin of the whole fit is
 * src/reference/columnFit.ts. */
import { ColumnWord } from "../src/kernels/columnFit-words";
import { factorBand, inverseBand, solveBand } from "./banded";
import { coreOffset, count, pointer, shared, windowOffset } from "./columnFit";
import { spread } from "./lanes";

/** Shifts and both variances of the group's fibres. `flux`: theirs, v128 each. A fibre whose light may not tell has no shift. */
export function localShifts(job: usize, group: i32, flux: usize): void {
  const nFibre = count(job, ColumnWord.nFibre);
  const b = 2 * count(job, ColumnWord.bandwidth) + 1;
  const band = pointer(job, ColumnWord.localBand);
  const rhs = pointer(job, ColumnWord.localRhs);
  const inverse = pointer(job, ColumnWord.localInverse);
  scaleSlopes(job, flux);
  fillSystem(job, band, rhs, (<usize>(b + 1)) << 4);
  factorBand<f32>(band, 2 * nFibre, b);
  inverseBand<f32>(band, 2 * nFibre, b, inverse);
  solveBand<f32>(band, 2 * nFibre, b, rhs);
  const out = (<usize>group * <usize>nFibre) << 4;
  const row = (<usize>(b + 1)) << 4;
  for (let k: usize = 0; k < <usize>nFibre; k++) {
    const at = out + (k << 4);
    v128.store(pointer(job, ColumnWord.fluxVariance) + at, v128.load(inverse + 2 * k * row));
    v128.store(pointer(job, ColumnWord.shift) + at, v128.load(rhs + (k << 5), 16));
    v128.store(pointer(job, ColumnWord.shiftVariance) + at, v128.load(inverse + (2 * k + 1) * row));
  }
}

/** Derivatives by δ: slopes times flux. */
function scaleSlopes(job: usize, flux: usize): void {
  const bytes = (<usize>count(job, ColumnWord.nWindow)) << 4;
  let own = pointer(job, ColumnWord.slopes);
  for (let k: usize = 0; k < <usize>count(job, ColumnWord.nFibre); k++) {
    const tells = load<u8>(pointer(job, ColumnWord.tells) + k);
    const light = tells ? v128.load(flux + (k << 4)) : spread<f32>(0);
    for (let at: usize = 0; at < bytes; at += 16) v128.store(own + at, f32x4.mul(light, v128.load(own + at)));
    own += bytes;
  }
}

/** Rows 2k (flux) and 2k + 1 (shift), each with its unknowns from the diagonal downwards. */
function fillSystem(job: usize, band: usize, rhs: usize, row: usize): void {
  const coreBytes = (<usize>count(job, ColumnWord.nCore)) << 4;
  const windowBytes = (<usize>count(job, ColumnWord.nWindow)) << 4;
  const core = coreOffset(job);
  const ofFlux = pointer(job, ColumnWord.weighted);
  const ofShift = ofFlux + windowBytes;
  memory.fill(band, 0, 2 * <usize>count(job, ColumnWord.nFibre) * row);
  for (let k: i32 = 0; k < count(job, ColumnWord.nFibre); k++) {
    const own = <usize>k * windowBytes + core;
    const weights = pointer(job, ColumnWord.weights) + own;
    const slopes = pointer(job, ColumnWord.slopes) + own;
    const rows = windowOffset(job, k) + core;
    let fluxRhs = spread<f32>(0);
    let shiftRhs = spread<f32>(0);
    for (let at: usize = 0; at < coreBytes; at += 16) {
      const ivar = v128.load(pointer(job, ColumnWord.inverseVariance) + rows + at);
      const rest = v128.load(pointer(job, ColumnWord.rest) + rows + at);
      const p = f32x4.mul(v128.load(weights + at), ivar);
      const q = f32x4.mul(v128.load(slopes + at), ivar);
      v128.store(ofFlux + at, p);
      v128.store(ofShift + at, q);
      fluxRhs = f32x4.add(fluxRhs, f32x4.mul(p, rest));
      shiftRhs = f32x4.add(shiftRhs, f32x4.mul(q, rest));
    }
    v128.store(rhs + ((<usize>k) << 5), fluxRhs);
    v128.store(rhs + ((<usize>k) << 5), shiftRhs, 16);
    const fluxRow = band + 2 * <usize>k * row;
    const shiftRow = fluxRow + row;
    v128.store(shiftRow, shared(job, k, 0, ofShift, weights), 16);
    for (let d: i32 = 0; d <= min(k, count(job, ColumnWord.bandwidth)); d++) {
      const back = <usize>d * windowBytes;
      const at = (<usize>d) << 5; // two unknowns a fibre
      v128.store(fluxRow + at, shared(job, k, d, ofFlux, weights - back));
      v128.store(shiftRow + at, shared(job, k, d, ofShift, slopes - back));
      if (d == 0) continue;
      v128.store(fluxRow + at - 16, shared(job, k, d, ofFlux, slopes - back));
      v128.store(shiftRow + at + 16, shared(job, k, d, ofShift, weights - back));
    }
  }
}
