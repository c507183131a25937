/** Cosmic rays in one column: pixels that hold more light than model and noise allow.
 *
 * A pixel is rejected when its excess is beyond κ·σ, with σ² = v + (ε·model)² and ε the profile's own relative
 * error, so that a sharp bright emission line, which the profile fits only to within ε, is not eaten. Of a cluster
 * only the worst is taken in a round; the fit is then repeated without it. */
import type { Column } from "./column.js";
import { pixelVariance } from "./variance.js";

/** Rows each side within which only the worst pixel goes in one round. */
const clusterRows = 2;

/** Squared excess over noise, 0 where the pixel is not good or lies below the model: [nRow]. */
export function squaredExcess(column: Column, model: Float64Array, profileError: number): Float64Array {
  return Float64Array.from({ length: column.nRow }, (_, row) => {
    const excess = column.light[row] - model[row];
    if (column.bits[row] !== 0 || !(excess > 0)) return 0;
    const variance = pixelVariance(column.noise, row, model[row] + column.background[row]);
    const slack = profileError * model[row];
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
