/** Extraction of a stretch of columns: the readable twin of assembly/extract.ts, in double precision.
 *
 * Each column stands alone. Weights start from the data's own noise, which no cosmic ray can fool; then model,
 * rejection and variance follow each other until nothing changes, and the method's estimate closes the column. */
import { Flag, MaskBit } from "./bits.js";
import { boxcar } from "./boxcar.js";
import type { Column } from "./column.js";
import { squaredExcess, worstOutliers } from "./cosmic.js";
import { solveCrosstalk, withoutCrosstalk } from "./crosstalk.js";
import { columnFlags } from "./flags.js";
import { type Estimate, joint, type Normal, normalEquations, solveNormal } from "./joint.js";
import { legendreArgument, legendreValue } from "./legendre.js";
import { optimal } from "./optimal.js";
import { type BlockProfiles, blockProfiles, columnWeights, nodeShares, type ProfileInput } from "./profile.js";
import { type NoiseIngredients, pixelVariance } from "./variance.js";

export type Method = "joint" | "optimal" | "boxcar";

/** Smooth background b(x, y) = Σ c[i][j] P_i(x) P_j(y), e⁻ per pixel; x and y each mapped to [−1, 1]. */
export interface SmoothBackground {
  nX: number;
  nY: number;
  /** nX × nY */
  coefficients: Float64Array;
}

export interface ExtractionInput extends ProfileInput {
  /** ny × nx, e⁻. */
  electrons: Float32Array;
  /** ny × nx, bits of MaskBit. */
  mask: Uint8Array;
  noise: NoiseIngredients;
  background: SmoothBackground;
  /** nFibre × 2: first and last column in which the tramline was traced. */
  seen: Int32Array;
  bandwidth: number;
  method: Method;
  crosstalk: boolean;
  /** Pixels each side of the tramline that the boxcar sums. */
  halfAperture: number;
  /** ε: share of the light nearby by which data may miss the model before noise. */
  profileError: number;
  /** Reject pixels beyond `kappa`, mark suspects beyond `growKappa`; 0 takes `rejected` as it is. */
  kappa: number;
  growKappa: number;
  minRounds: number;
  maxRounds: number;
  /** ny × nx, bits of MaskBit: what earlier passes rejected; this pass adds to it. */
  rejected: Uint8Array;
}

/** Images nFibre × nx, index = fibre · nx + x. */
export interface ExtractionOutput {
  /** e⁻ per dispersion pixel: all the light of the fibre in that column. */
  flux: Float32Array | Float64Array;
  /** e⁻²: its variance. */
  variance: Float32Array | Float64Array;
  /** e⁻²: covariance of fibre k with fibre k + 1 in the same column; the last row is NaN. */
  neighbourCovariance: Float32Array | Float64Array;
  /** Bits of Flag. */
  flags: Int32Array;
  /** Reduced χ² of the profile fit in the fibre's window. */
  chi2: Float32Array | Float64Array;
  /** e⁻ per pixel: scattered light under the fibre. */
  background: Float32Array | Float64Array;
}

/** Change of a flux, in σ, up to which its column has settled. */
const settledSigma = 0.1;

/** Extracts columns x0 … x1 − 1 into `output`; x0 must begin a block. */
export function extractColumns(input: ExtractionInput, output: ExtractionOutput, x0: number, x1: number): void {
  for (let blockStart = x0; blockStart < x1; blockStart += input.blockColumns) {
    const block = blockProfiles(input, blockStart);
    const end = Math.min(blockStart + input.blockColumns, x1);
    for (let x = blockStart; x < end; x++) {
      const column = loadColumn(input, block, nodeShares(input.blockColumns, x - blockStart), x);
      extractColumn(input, column, output, x);
    }
  }
}

/** One column: settle variances and rejections, estimate, write out. */
function extractColumn(input: ExtractionInput, column: Column, output: ExtractionOutput, x: number): void {
  const { nFibre, bandwidth } = column;
  for (let row = 0; row < column.nRow; row++) weigh(column, row, column.light[row] + column.background[row]);
  let normal = normalEquations(column);
  let flux = solveNormal(normal, nFibre, bandwidth);
  const lastChange = new Float64Array(nFibre);
  let model = modelLight(column, flux);
  for (let round = 0; round < input.maxRounds; round++) {
    const outliers =
      input.kappa > 0 ? worstOutliers(squaredExcess(column, flux, model, input.profileError), input.kappa ** 2) : [];
    if (round >= input.minRounds && outliers.length === 0 && hasSettled(lastChange, normal, bandwidth)) break;
    for (const row of outliers) column.bits[row] |= MaskBit.cosmic;
    for (let row = 0; row < column.nRow; row++) weigh(column, row, model[row] + column.background[row]);
    normal = normalEquations(column);
    const before = flux;
    flux = solveNormal(normal, nFibre, bandwidth);
    for (let k = 0; k < nFibre; k++) lastChange[k] = flux[k] - before[k];
    model = modelLight(column, flux);
  }
  const estimate = estimateBy(input, column, normal);
  const flags = columnFlags(
    column,
    lastChange,
    estimate.variance,
    (k) => x >= input.seen[2 * k] && x <= input.seen[2 * k + 1],
  );
  writeColumn(column, estimate, flags, model, output, input.nx, x);
  if (input.kappa > 0) writeRejected(input, column, squaredExcess(column, flux, model, input.profileError), x);
}

/** Whether every flux moved by less than 0.1 of the σ it would have alone, 1/√M[k][k]. */
function hasSettled(lastChange: Float64Array, normal: Normal, bandwidth: number): boolean {
  return lastChange.every(
    (change, k) => !(change * change * normal.band[k * (bandwidth + 1)] > settledSigma * settledSigma),
  );
}

function estimateBy(input: ExtractionInput, column: Column, normal: Normal): Estimate {
  const { nFibre, bandwidth } = column;
  if (input.method === "joint") return joint(normal, nFibre, bandwidth);
  const raw = input.method === "optimal" ? optimal(normal, nFibre, bandwidth) : boxcar(column, input.halfAperture);
  return (input.crosstalk ? solveCrosstalk : withoutCrosstalk)(raw, nFibre, bandwidth);
}

function weigh(column: Column, row: number, light: number): void {
  column.inverseVariance[row] = column.bits[row] === 0 ? 1 / pixelVariance(column.noise, row, light) : 0;
}

/** Σ f_k P_k on every row, background not included. e⁻, [nRow]. */
function modelLight(column: Column, flux: Float64Array): Float64Array {
  const model = new Float64Array(column.nRow);
  for (let k = 0; k < column.nFibre; k++) {
    const first = column.margin + column.start[k];
    for (let i = 0; i < column.nWindow; i++) model[first + i] += flux[k] * column.weights[k * column.nWindow + i];
  }
  return model;
}

/** A column of a block, told by the nodes' shares in it, before any pixel is read: profiles in place, nothing good. */
export function emptyColumn(input: ExtractionInput, block: BlockProfiles, shares: number[]): Column {
  const nWindow = 2 * input.halfWindow + 1;
  const margin = nWindow;
  const nRow = input.ny + 2 * margin;
  const zeros = () => new Float64Array(nRow);
  return {
    nRow,
    margin,
    nFibre: input.nFibre,
    nWindow,
    bandwidth: input.bandwidth,
    start: block.start,
    weights: columnWeights(block, nWindow, shares),
    centre: Float64Array.from({ length: input.nFibre }, (_, k) =>
      shares.reduce((sum, share, node) => sum + share * block.centre[4 * k + node], 0),
    ),
    light: zeros(),
    background: zeros(),
    noise: { fixed: zeros().fill(1), inverseResponse: zeros(), responseRelativeVariance: zeros() },
    bits: new Uint8Array(nRow).fill(MaskBit.missing),
    inverseVariance: zeros(),
  };
}

function loadColumn(input: ExtractionInput, block: BlockProfiles, shares: number[], x: number): Column {
  const column = emptyColumn(input, block, shares);
  const series = backgroundSeries(input.background, legendreArgument(x, input.nx));
  for (let y = 0; y < input.ny; y++) loadPixel(input, column, series, x, y);
  return column;
}

function loadPixel(input: ExtractionInput, column: Column, series: Float64Array, x: number, y: number): void {
  const { noise, nx } = input;
  const at = y * nx + x;
  const row = column.margin + y;
  const unmarked = input.mask[at] === 0 && !Number.isFinite(input.electrons[at]);
  const masked = unmarked ? MaskBit.missing : input.mask[at];
  column.bits[row] = masked | (input.rejected[at] & (MaskBit.cosmic | MaskBit.grown));
  column.background[row] = legendreValue(series, legendreArgument(y, input.ny));
  column.light[row] = column.bits[row] === 0 ? input.electrons[at] - column.background[row] : 0;
  column.noise.fixed[row] = noise.fixedVarianceImage?.[at] ?? noise.fixedVariance[noise.bandOfRow[y] * nx + x];
  column.noise.inverseResponse[row] = noise.inverseResponse?.[at] ?? 1;
  column.noise.responseRelativeVariance[row] = noise.responseRelativeVariance?.[at] ?? 0;
}

/** Coefficients of b(x, ·) in P_j(y) at one x: [nY]. */
export function backgroundSeries({ nX, nY, coefficients }: SmoothBackground, t: number): Float64Array {
  const column = new Float64Array(nX);
  return Float64Array.from({ length: nY }, (_, j) => {
    for (let i = 0; i < nX; i++) column[i] = coefficients[i * nY + j];
    return legendreValue(column, t);
  });
}

function writeColumn(
  column: Column,
  estimate: Estimate,
  flags: Int32Array,
  model: Float64Array,
  output: ExtractionOutput,
  nx: number,
  x: number,
): void {
  const valid = (k: number) => (flags[k] & (Flag.weightLost | Flag.outside)) === 0;
  for (let k = 0; k < column.nFibre; k++) {
    const at = k * nx + x;
    output.flux[at] = valid(k) ? estimate.flux[k] : Number.NaN;
    output.variance[at] = valid(k) ? estimate.variance[k] : Number.NaN;
    output.chi2[at] = valid(k) ? reducedChiSquare(column, model, k) : Number.NaN;
    const pair = k + 1 < column.nFibre && valid(k) && valid(k + 1);
    output.neighbourCovariance[at] = pair ? estimate.covarianceBelow[k + 1] : Number.NaN;
    output.flags[at] = flags[k];
    output.background[at] = column.background[middleRow(column, k)];
  }
}

/** The row of the frame nearest to the middle of the fibre's window. */
function middleRow(column: Column, k: number): number {
  const row = column.margin + column.start[k] + (column.nWindow >> 1);
  return Math.min(Math.max(row, column.margin), column.nRow - column.margin - 1);
}

/** χ² of the fit over the fibre's window, over its pixels less the parameters that they carry: each fibre counts by
 * the share of its profile that falls on them. */
function reducedChiSquare(column: Column, model: Float64Array, k: number): number {
  const first = column.margin + column.start[k];
  let [sum, freedom] = [0, 0];
  for (let row = first; row < first + column.nWindow; row++) {
    const excess = column.light[row] - model[row];
    sum += excess * excess * column.inverseVariance[row];
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

function writeRejected(input: ExtractionInput, column: Column, excess: Float64Array, x: number): void {
  const suspect = input.growKappa * input.growKappa;
  for (let y = 0; y < input.ny; y++) {
    const row = column.margin + y;
    const bits = column.bits[row] & MaskBit.cosmic;
    input.rejected[y * input.nx + x] |= bits | (excess[row] > suspect ? MaskBit.suspect : 0);
  }
}
