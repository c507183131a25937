/** Spectra out: what a column has come to, into the images; the readable twin of assembly/spectra.ts. */
import { Flag, MaskBit } from "./bits.js";
import type { Stretch } from "./chunks.js";
import type { Column } from "./column.js";
import type { Residue } from "./cosmic.js";
import type { ExtractionInput, ExtractionOutput } from "./extraction.js";
import type { Estimate } from "./joint.js";
import type { Fit } from "./rounds.js";

export function writeColumn(
  column: Column,
  estimate: Estimate,
  flags: Int32Array,
  residue: Residue,
  output: ExtractionOutput,
  nx: number,
  x: number,
  [k0, k1]: Stretch,
): void {
  const valid = (k: number) => (flags[k] & (Flag.weightLost | Flag.outside)) === 0;
  for (let k = k0; k < k1; k++) {
    const at = k * nx + x;
    output.flux[at] = valid(k) ? estimate.flux[k] : Number.NaN;
    output.variance[at] = valid(k) ? estimate.variance[k] : Number.NaN;
    output.chi2[at] = valid(k) ? reducedChiSquare(column, residue, k) : Number.NaN;
    const pair = k + 1 < column.nFibre && valid(k) && valid(k + 1);
    output.neighbourCovariance[at] = pair ? estimate.covarianceBelow[k + 1] : Number.NaN;
    output.flags[at] = flags[k];
    output.background[at] = column.background[middleRow(column, k)];
  }
}

export function writeFit({ flux }: Fit, output: ExtractionOutput, nx: number, x: number, [k0, k1]: Stretch): void {
  output.fitFlux ??= new Float64Array(output.flux.length);
  for (let k = k0; k < k1; k++) output.fitFlux[k * nx + x] = flux[k];
}

/** The row of the frame nearest to the middle of the fibre's window. */
function middleRow(column: Column, k: number): number {
  const row = column.margin + column.start[k] + (column.nWindow >> 1);
  return Math.min(Math.max(row, column.margin), column.nRow - column.margin - 1);
}

/** χ² of the fit over the fibre's window, over its pixels less the parameters that they carry: each fibre counts by
 * the share of its profile that falls on them. */
function reducedChiSquare(column: Column, { chiSquare }: Residue, k: number): number {
  const first = column.margin + column.start[k];
  let [sum, freedom] = [0, 0];
  for (let row = first; row < first + column.nWindow; row++) {
    sum += chiSquare[row];
    if (column.inverseVariance[row] > 0) freedom += 1 - weightsOnRow(column, k, row);
  }
  return freedom > 0.5 ? sum / freedom : Number.NaN;
}

function weightsOnRow(column: Column, k: number, row: number): number {
  let sum = 0;
  for (let m = Math.max(k - column.bandwidth, 0); m <= Math.min(k + column.bandwidth, column.nFibre - 1); m++) {
    const i = row - column.margin - column.start[m];
    if (i >= 0 && i < column.nWindow) sum += column.weights[m * column.nWindow + i];
  }
  return sum;
}

export function writeRejected(input: ExtractionInput, { column, residue }: Fit, x: number): void {
  for (let y = 0; y < input.ny; y++) {
    const row = column.margin + y;
    const suspect = residue.suspect[row] ? MaskBit.suspect : 0;
    input.rejected[y * input.nx + x] |= (column.bits[row] & MaskBit.cosmic) | suspect;
  }
}
