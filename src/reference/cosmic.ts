/** Cosmic rays in one column: pixels that hold more light than model and noise allow.
 *
 * A pixel is rejected when its excess is beyond κ·σ, with σ² = v + (ε·reach)², ε the profile's own relative error and
 * reach the fibres' light nearby: a profile that is a little too narrow, or off its place, leaves light where its model
 * has none. So a sharp bright emission line, which the profile fits only to within ε, is not eaten. Of a cluster only
 * the worst is taken in a round; the fit is then repeated without it. */
import type { Column } from "./column.js";
import { pixelVariance } from "./variance.js";

/** Rows each side within which only the worst pixel goes in one round. */
const clusterRows = 2;

/** Rows by which a misfit of the profile may displace light. */
const reachRows = 2;
/** The same further out: share of the fibre's light on any pixel of its window. */
const wingShare = 0.02;

/** Σ |f_k| · (largest weight within ± reachRows + wingShare) on every row: what a misfit is a share of. e⁻, [nRow]. */
export function lightInReach(column: Column, flux: Float64Array): Float64Array {
  const { nWindow, weights } = column;
  const reach = new Float64Array(column.nRow);
  for (let k = 0; k < column.nFibre; k++) {
    const first = column.margin + column.start[k];
    for (let i = 0; i < nWindow; i++) {
      let largest = 0;
      for (let j = Math.max(i - reachRows, 0); j <= Math.min(i + reachRows, nWindow - 1); j++) {
        largest = Math.max(largest, weights[k * nWindow + j]);
      }
      reach[first + i] += Math.abs(flux[k]) * (largest + wingShare);
    }
  }
  return reach;
}

/** Squared excess over noise, 0 where the pixel is not good or lies below the model: [nRow]. */
export function squaredExcess(
  column: Column,
  flux: Float64Array,
  model: Float64Array,
  profileError: number,
): Float64Array {
  const reach = lightInReach(column, flux);
  return Float64Array.from({ length: column.nRow }, (_, row) => {
    const excess = column.light[row] - model[row];
    if (column.bits[row] !== 0 || !(excess > 0)) return 0;
    const variance = pixelVariance(column.noise, row, model[row] + column.background[row]);
    const slack = profileError * reach[row];
    return (excess * excess) / (variance + slack * slack);
  });
}

/** Rows to reject: beyond κ² and the worst within ± clusterRows (of equals the lower). */
export function worstOutliers(excess: Float64Array, kappaSquared: number): number[] {
  const rows: number[] = [];
  for (let row = 0; row < excess.length; row++) {
    if (!(excess[row] > kappaSquared)) continue;
    let worst = true;
    for (let j = 1; j <= clusterRows; j++) {
      if (row - j >= 0 && excess[row - j] >= excess[row]) worst = false;
      if (row + j < excess.length && excess[row + j] > excess[row]) worst = false;
    }
    if (worst) rows.push(row);
  }
  return rows;
}
