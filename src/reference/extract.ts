/** Extraction of a stretch of columns: the readable twin of assembly/extract.ts, in double precision.
 *
 * Each column stands alone. Weights start from the data's own noise, which no cosmic ray can fool; then model,
 * rejection and variance follow each other. After the first rounds only the fibres that still move are fitted again, until
 * nothing changes, and the method's estimate closes the column. */
import { Flag, MaskBit } from "./bits.js";
import { boxcar } from "./boxcar.js";
import { callRow, chunkFibres, innerStretch, rowsOf, type Stretch, stretchOf } from "./chunks.js";
import type { Column } from "./column.js";
import {
  noResidue,
  noteResidue,
  type Residue,
  reject,
  type Thresholds,
  weighByModel,
  worstOutliers,
} from "./cosmic.js";
import { solveCrosstalk, withoutCrosstalk } from "./crosstalk.js";
import { columnFlags } from "./flags.js";
import {
  type Estimate,
  fillNormal,
  jointCovariance,
  type Normal,
  noNormal,
  normalEquations,
  solveNormal,
  solveStretch,
} from "./joint.js";
import { legendreArgument, legendreValue } from "./legendre.js";
import { addLight, type ColumnLight, noLight } from "./light.js";
import { optimal } from "./optimal.js";
import {
  type BlockProfiles,
  blockProfiles,
  columnWeights,
  columnWings,
  nodeShares,
  type ProfileInput,
  wingShares,
} from "./profile.js";
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
  /** e⁻ per dispersion pixel: of the joint fit, whatever the method. */
  fitFlux?: Float64Array;
}

/** Change of a flux, in σ, up to which it has settled. */
const settledSigma = 0.1;

/** A column at work. */
interface Fit {
  column: Column;
  thresholds: Thresholds;
  normal: Normal;
  flux: Float64Array;
  lastChange: Float64Array;
  light: ColumnLight;
  residue: Residue;
}

/** Extracts columns x0 … x1 − 1 into `output`. */
export function extractColumns(input: ExtractionInput, output: ExtractionOutput, x0: number, x1: number): void {
  for (let first = x0 - (x0 % input.blockColumns); first < x1; first += input.blockColumns) {
    const block = blockProfiles(input, first);
    const end = Math.min(first + input.blockColumns, x1);
    for (let x = Math.max(first, x0); x < end; x++) {
      extractColumn(input, loadColumn(input, block, x - first, x), output, x);
    }
  }
}

/** Takes into account, in columns x0 … x1 − 1 that were extracted before, what has grown in `input.rejected` since. */
export function settleGrownColumns(input: ExtractionInput, output: ExtractionOutput, x0: number, x1: number): void {
  for (let first = x0 - (x0 % input.blockColumns); first < x1; first += input.blockColumns) {
    const end = Math.min(first + input.blockColumns, x1);
    let block: BlockProfiles | undefined;
    for (let x = Math.max(first, x0); x < end; x++) {
      const rows = grownRows(input, x);
      if (rows.length === 0) continue;
      block ??= blockProfiles(input, first);
      const called = new Set<number>();
      const margin = marginRows(input);
      const column = loadColumn(input, block, x - first, x);
      for (const y of rows) callRow(column, margin + y, called);
      for (const chunk of sorted(called)) settleGrown(input, column, output, x, chunk);
    }
  }
}

/** One column: settle variances and rejections, estimate, write out. */
function extractColumn(input: ExtractionInput, column: Column, output: ExtractionOutput, x: number): void {
  const { nFibre, bandwidth, margin, nRow } = column;
  const fit = openFit(input, column);
  const everyone: Stretch = [0, nFibre];
  const rows: [number, number] = [margin, nRow - margin];
  const rejecting = input.kappa > 0;
  let called = new Set<number>();
  for (let row = 0; row < nRow; row++) {
    column.inverseVariance[row] = weightByData(column, row);
    column.net[row] = column.light[row];
  }
  fit.normal = normalEquations(column);
  for (let round = 0; ; round++) {
    const last = round === input.minRounds;
    takeSolution(fit, everyone, solveNormal(fit.normal, nFibre, bandwidth), last ? called : undefined);
    // In the last round most wings would change by a hundredth of a hundredth; but not where a hit has just gone.
    const wings = !last || round === 0;
    if (!wings) addLight(column, fit.light, movedBy(fit), 0, nFibre, { windows: false, wings: true });
    fit.light = { model: new Float64Array(nRow), wings: wings ? new Float64Array(nRow) : fit.light.wings };
    addLight(column, fit.light, fit.flux, 0, nFibre, { windows: true, wings });
    if (last) break;
    if (rejecting) rejectWorst(fit, rows);
    weighByModel(column, fit.light, rows);
    fit.normal = normalEquations(column);
  }
  noteResidue(column, fit.light, fit.flux, rows, fit.thresholds, fit.residue);
  if (rejecting && input.minRounds < input.maxRounds) {
    for (const row of rejectWorst(fit, rows)) callRow(column, row, called);
  }
  for (let round = input.minRounds; round < input.maxRounds && called.size > 0; round++) {
    const chunks = sorted(called);
    called = new Set();
    for (const chunk of chunks) {
      const stretch = stretchOf(column, chunk);
      const own = rowsOf(column, stretch);
      settleStretch(fit, stretch, 0, nFibre, called);
      noteResidue(column, fit.light, fit.flux, own, fit.thresholds, fit.residue);
      if (!rejecting || round + 1 === input.maxRounds) continue;
      for (const row of rejectWorst(fit, own)) callRow(column, row, called);
    }
  }
  if (rejecting) writeRejected(input, fit, x);
  writeFit(fit, output, input.nx, x, everyone);
  close(input, fit, output, x, everyone, everyone);
}

/** One chunk of a column once more, from the fluxes that the first look left, without further rejection. */
function settleGrown(input: ExtractionInput, column: Column, output: ExtractionOutput, x: number, chunk: number): void {
  const fit = openFit({ ...input, kappa: 0 }, column);
  const stretch = stretchOf(column, chunk);
  const from = Math.max(stretch[0] - column.bandwidth, 0);
  const to = Math.min(stretch[1] + column.bandwidth, column.nFibre);
  const rows = rowsOf(column, [from, to]);
  let [w0, w1] = [from, to];
  while (w0 > 0 && rowsOf(column, [w0 - 1, w0])[1] + column.wing > rows[0]) w0--;
  while (w1 < column.nFibre && rowsOf(column, [w1, w1 + 1])[0] - column.wing < rows[1]) w1++;
  for (let k = w0; k < w1; k++) fit.flux[k] = output.fitFlux![k * input.nx + x];
  addLight(column, fit.light, fit.flux, w0, w1, { windows: true, wings: true });
  weighByModel(column, fit.light, rows);
  for (let round = 0; round < input.maxRounds; round++) {
    const called = new Set<number>();
    settleStretch(fit, stretch, from, to, called);
    if (round + 1 >= input.minRounds && called.size === 0) break;
  }
  noteResidue(column, fit.light, fit.flux, rowsOf(column, stretch), fit.thresholds, fit.residue);
  const inner = innerStretch(column, chunk);
  writeFit(fit, output, input.nx, x, inner);
  close(input, fit, output, x, stretch, inner);
}

function openFit({ profileError, kappa, growKappa }: ExtractionInput, column: Column): Fit {
  return {
    column,
    thresholds: { profileError, kappa, growKappa },
    normal: noNormal(column.nFibre, column.bandwidth),
    flux: new Float64Array(column.nFibre),
    lastChange: new Float64Array(column.nFibre),
    light: noLight(column),
    residue: noResidue(column),
  };
}

/** Another round for a stretch of fibres while the others stand still: variances, fit, light. Of the fibres only
 * `lowest` … `highest` − 1 are known. */
function settleStretch(fit: Fit, stretch: Stretch, lowest: number, highest: number, called: Set<number>): void {
  const { column, normal, light } = fit;
  const { bandwidth } = column;
  const [k0, k1] = stretch;
  weighByModel(column, light, rowsOf(column, stretch));
  // Every fibre that sees one of these rows, so that the equations always belong to the variances as they are.
  fillNormal(column, normal, Math.max(k0 - bandwidth, lowest), Math.min(k1 + bandwidth, highest), lowest);
  const before = fit.flux.slice();
  takeSolution(fit, stretch, solveStretch(normal, bandwidth, fit.flux, stretch, highest), called);
  const change = fit.flux.map((flux, k) => flux - before[k]);
  addLight(column, light, change, k0, k1, { windows: true, wings: true });
}

/** New fluxes of a stretch; by how much each changed is kept, and who moved by more than a tenth of the σ that it would have
 * alone, 1/√M[k][k], is called. */
function takeSolution(fit: Fit, [k0, k1]: Stretch, solution: Float64Array, called: Set<number> | undefined): void {
  const { column, normal, flux, lastChange } = fit;
  for (let k = k0; k < k1; k++) {
    const change = solution[k - k0] - flux[k];
    flux[k] = solution[k - k0];
    lastChange[k] = change;
    const moved = change * change * normal.band[k * (column.bandwidth + 1)] > settledSigma * settledSigma;
    if (moved) called?.add(Math.floor(k / chunkFibres));
  }
}

/** By how much each flux just changed, e⁻; 0 for those that have settled. */
function movedBy({ column, normal, lastChange }: Fit): Float64Array {
  const limit = settledSigma * settledSigma;
  return lastChange.map((change, k) =>
    change * change * normal.band[k * (column.bandwidth + 1)] > limit ? change : 0,
  );
}

/** Takes the worst outliers of these rows out of the fit; returns them. */
function rejectWorst({ column, light, flux, thresholds }: Fit, rows: [number, number]) {
  const outliers = worstOutliers(column, light, flux, thresholds, rows);
  reject(column, outliers);
  return outliers;
}

function weightByData(column: Column, row: number): number {
  if (column.bits[row] !== 0) return 0;
  return 1 / pixelVariance(column.noise, row, column.light[row] + column.background[row]);
}

/** The method's estimate of the fibres of `known`, flags, and those of `written` into the images. */
function close(
  input: ExtractionInput,
  fit: Fit,
  output: ExtractionOutput,
  x: number,
  known: Stretch,
  written: Stretch,
): void {
  const { column } = fit;
  const estimate = estimateBy(input, fit, known);
  const flags = columnFlags(column, fit.lastChange, estimate.variance, (k) => isSeen(input, k, x), known);
  writeColumn(column, estimate, flags, fit.residue, output, input.nx, x, written);
}

function isSeen({ seen }: ExtractionInput, k: number, x: number): boolean {
  return x >= seen[2 * k] && x <= seen[2 * k + 1];
}

function grownRows({ nx, ny, rejected }: ExtractionInput, x: number): number[] {
  const rows: number[] = [];
  for (let y = 0; y < ny; y++) if (rejected[y * nx + x] & MaskBit.grown) rows.push(y);
  return rows;
}

function sorted(chunks: Set<number>): number[] {
  return [...chunks].sort((a, b) => a - b);
}

function estimateBy(input: ExtractionInput, { column, normal, flux }: Fit, [k0, k1]: Stretch): Estimate {
  const part = stretchColumn(column, [k0, k1]);
  const own = stretchNormal(normal, column.bandwidth, [k0, k1]);
  const { nFibre, bandwidth } = part;
  const estimate = () => {
    if (input.method === "joint") return jointCovariance(own, flux.slice(k0, k1), nFibre, bandwidth);
    const raw = input.method === "optimal" ? optimal(own, nFibre, bandwidth) : boxcar(part, input.halfAperture);
    return (input.crosstalk ? solveCrosstalk : withoutCrosstalk)(raw, nFibre, bandwidth);
  };
  return placed(estimate(), k0, column.nFibre);
}

/** The column as if it held no fibres but those of the stretch. */
function stretchColumn(column: Column, [k0, k1]: Stretch): Column {
  if (k1 - k0 === column.nFibre) return column;
  const { nWindow, wing } = column;
  return {
    ...column,
    nFibre: k1 - k0,
    start: column.start.subarray(k0, k1),
    centre: column.centre.subarray(k0, k1),
    weights: column.weights.subarray(k0 * nWindow, k1 * nWindow),
    wings: column.wings.subarray(2 * k0 * wing, 2 * k1 * wing),
  };
}

function stretchNormal({ band, rhs }: Normal, bandwidth: number, [k0, k1]: Stretch): Normal {
  return { band: band.slice(k0 * (bandwidth + 1), k1 * (bandwidth + 1)), rhs: rhs.slice(k0, k1) };
}

/** An estimate of a stretch at its place among all fibres; NaN for the others. */
function placed({ flux, variance, covarianceBelow }: Estimate, k0: number, nFibre: number): Estimate {
  const place = (own: Float64Array) => {
    const all = new Float64Array(nFibre).fill(Number.NaN);
    all.set(own, k0);
    return all;
  };
  return { flux: place(flux), variance: place(variance), covarianceBelow: place(covarianceBelow) };
}

/** Rows that a column has beyond each end of the frame: a window and its wing may lie there, and two rows more are looked at. */
function marginRows({ halfWindow, wing }: ExtractionInput): number {
  return 2 * halfWindow + 1 + wing + 2;
}

/** Column `offset` of a block before any pixel is read: profiles in place, nothing good. */
export function emptyColumn(input: ExtractionInput, block: BlockProfiles, offset: number): Column {
  const nWindow = 2 * input.halfWindow + 1;
  const margin = marginRows(input);
  const nRow = input.ny + 2 * margin;
  const zeros = () => new Float64Array(nRow);
  const shares = nodeShares(input.blockColumns, offset);
  const light = zeros();
  return {
    nRow,
    margin,
    nFibre: input.nFibre,
    nWindow,
    bandwidth: input.bandwidth,
    start: block.start,
    weights: columnWeights(block, nWindow, shares),
    wing: input.wing,
    wings: columnWings(block, input.wing, wingShares(input.blockColumns, offset)),
    centre: Float64Array.from({ length: input.nFibre }, (_, k) =>
      shares.reduce((sum, share, node) => sum + share * block.centre[block.nNode * k + node], 0),
    ),
    light,
    background: zeros(),
    noise: { fixed: zeros().fill(1), inverseResponse: zeros(), responseRelativeVariance: zeros() },
    bits: new Uint8Array(nRow).fill(MaskBit.missing),
    inverseVariance: zeros(),
    net: light,
  };
}

function loadColumn(input: ExtractionInput, block: BlockProfiles, offset: number, x: number): Column {
  const column = emptyColumn(input, block, offset);
  column.net = new Float64Array(column.nRow);
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

function writeFit({ flux }: Fit, output: ExtractionOutput, nx: number, x: number, [k0, k1]: Stretch): void {
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

function writeRejected(input: ExtractionInput, { column, residue }: Fit, x: number): void {
  for (let y = 0; y < input.ny; y++) {
    const row = column.margin + y;
    const suspect = residue.suspect[row] ? MaskBit.suspect : 0;
    input.rejected[y * input.nx + x] |= (column.bits[row] & MaskBit.cosmic) | suspect;
  }
}
