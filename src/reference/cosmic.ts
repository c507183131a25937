/** The pixels of a column held against the model of their light: new variances, and cosmic rays, pixels that hold more light
 * than model and noise allow.
 *
 * A pixel is rejected when its excess is beyond κ·σ, with σ² = v + (ε·reach)², ε the profile's own relative error and
 * reach the fibres' light nearby: a profile that is a little too narrow, or off its place, leaves light where its model
 * has none. So a sharp bright emission line, which the profile fits only to within ε, is not eaten. Of a cluster only
 * the worst is taken in a round; the fit is then repeated without it. */
import { MaskBit } from "./bits.js";
import { type Column, windowFirst } from "./column.js";
import type { ColumnLight } from "./light.js";
import { pixelVariance } from "./variance.js";

/** Rows each side within which only the worst pixel goes in one round. */
const clusterRows = 2;
/** Rows by which a misfit of the profile may displace light. */
const reachRows = 2;
/** The same further out: share of the light of the fibres about, on any pixel. */
const wingShare = 0.02;

/** What a column's last confrontation with its model left. */
export interface Residue {
  /** nRow: excess² · inverse variance. */
  chiSquare: Float64Array;
  /** nRow: 1 where brighter than the lower threshold. */
  suspect: Uint8Array;
}

export interface Thresholds {
  profileError: number;
  /** 0: nothing is rejected. */
  kappa: number;
  growKappa: number;
}

export function noResidue({ nRow }: Column): Residue {
  return { chiSquare: new Float64Array(nRow), suspect: new Uint8Array(nRow) };
}

/** New inverse variances on rows from … to − 1, and the light that the next fit is to see. */
export function weighByModel(column: Column, light: ColumnLight, [from, to]: [number, number]): void {
  for (let row = from; row < to; row++) {
    const all = light.model[row] + light.wings[row] + column.background[row];
    column.inverseVariance[row] = column.bits[row] === 0 ? 1 / pixelVariance(column.noise, row, all) : 0;
    column.net[row] = column.light[row] - light.wings[row];
  }
}

/** Notes on rows from … to − 1 what the fit leaves there. */
export function noteResidue(
  column: Column,
  light: ColumnLight,
  flux: Float64Array,
  [from, to]: [number, number],
  thresholds: Thresholds,
  residue: Residue,
): void {
  const suspect = thresholds.growKappa * thresholds.growKappa;
  for (let row = from; row < to; row++) {
    const left = column.light[row] - (light.model[row] + light.wings[row]);
    residue.chiSquare[row] = left * left * column.inverseVariance[row];
    const allowed = allowedOn(column, light, flux, thresholds, row);
    residue.suspect[row] = squaredExcess(column, light, row) > suspect * allowed ? 1 : 0;
  }
}

/** Light nearby that a misfit is a share of: the most within ± reachRows, and a share of that of the fibres about, the first
 * whose window ends above the row and as many more as windows can overlap. e⁻ */
export function reachOn(column: Column, { model, wings }: ColumnLight, flux: Float64Array, row: number): number {
  const { nFibre, bandwidth, nWindow } = column;
  let near = 0;
  for (let j = -reachRows; j <= reachRows; j++) near = Math.max(near, Math.abs(model[row + j] + wings[row + j]));
  let k = 0;
  while (k < nFibre && windowFirst(column, k) + nWindow <= row) k++;
  let about = 0;
  for (let m = k; m <= Math.min(k + bandwidth, nFibre - 1); m++) about += Math.abs(flux[m]);
  return near + about * wingShare;
}

/** Rows from … to − 1 beyond κ that are the worst of their cluster. */
export function worstOutliers(
  column: Column,
  light: ColumnLight,
  flux: Float64Array,
  thresholds: Thresholds,
  [from, to]: [number, number],
): number[] {
  const limit = thresholds.kappa * thresholds.kappa;
  const allowed = (row: number) => allowedOn(column, light, flux, thresholds, row);
  const ratio = (row: number) => squaredExcess(column, light, row) / allowed(row);
  const rows: number[] = [];
  for (let row = from; row < to; row++) {
    if (!(squaredExcess(column, light, row) > limit * allowed(row))) continue;
    const own = ratio(row);
    let worst = true;
    for (let j = 1; j <= clusterRows; j++) worst &&= ratio(row - j) < own && ratio(row + j) <= own;
    if (worst) rows.push(row);
  }
  return rows;
}

/** Takes `rows` out of the fit. */
export function reject(column: Column, rows: number[]): void {
  for (const row of rows) {
    column.bits[row] |= MaskBit.cosmic;
    column.inverseVariance[row] = 0;
  }
}

/** Excess over the model squared, 0 where the pixel is not good or lies below the model. */
function squaredExcess(column: Column, { model, wings }: ColumnLight, row: number): number {
  const excess = Math.max(column.light[row] - (model[row] + wings[row]), 0);
  return column.bits[row] === 0 ? excess * excess : 0;
}

/** What an excess squared is held against: variance, and the profile's own error. */
function allowedOn(
  column: Column,
  light: ColumnLight,
  flux: Float64Array,
  { profileError }: Thresholds,
  row: number,
): number {
  const all = light.model[row] + light.wings[row] + column.background[row];
  const slack = profileError * reachOn(column, light, flux, row);
  return pixelVariance(column.noise, row, all) + slack * slack;
}
