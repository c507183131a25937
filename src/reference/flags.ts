/** Flags of one column's fluxes: what happened to the pixels under each profile. */
import { Flag, MaskBit } from "./bits.js";
import type { Stretch } from "./chunks.js";
import type { Column } from "./column.js";

/** Share of the profile that a masked pixel must hold to be worth a word. */
const noticedShare = 0.01;
/** Share of the profile that may be lost before the flux is not to be trusted. */
const largestLoss = 0.5;
/** Change of the flux in the last round, in σ, from which on it counts as unsettled. */
const unsettledSigma = 0.1;

/** [nFibre] bits of Flag, 0 outside the stretch. `lastChange`, `variance`: [nFibre], e⁻ and e⁻². `seen(k)`: whether the tramline was traced here. */
export function columnFlags(
  column: Column,
  lastChange: Float64Array,
  variance: Float64Array,
  seen: (k: number) => boolean,
  [k0, k1]: Stretch = [0, column.nFibre],
): Int32Array {
  const flags = new Int32Array(column.nFibre);
  for (let k = k0; k < k1; k++) {
    flags[k] = pixelFlags(column, k) | (seen(k) ? 0 : Flag.extrapolated);
    const row = column.start[k] + column.centre[k];
    if (!(row >= -0.5 && row < column.nRow - 2 * column.margin - 0.5)) flags[k] |= Flag.outside;
    if (!(variance[k] > 0)) flags[k] |= Flag.weightLost;
    else if (lastChange[k] * lastChange[k] > unsettledSigma * unsettledSigma * variance[k]) {
      flags[k] |= Flag.varianceUnsettled;
    }
    if (flags[k] & Flag.weightLost) flags[k] &= ~Flag.varianceUnsettled; // of a flux that is none
  }
  return flags.map((own, k) => (saturatedBeside(column, flags, k) ? own | Flag.neighbourSaturated : own));
}

function pixelFlags(column: Column, k: number): number {
  let [lost, bad, saturated, cosmic] = [0, 0, 0, 0];
  for (let i = 0; i < column.nWindow; i++) {
    const bits = column.bits[column.margin + column.start[k] + i];
    if (bits === 0) continue;
    const share = column.weights[k * column.nWindow + i];
    lost += share;
    if (bits & (MaskBit.bad | MaskBit.missing)) bad += share;
    if (bits & MaskBit.saturated) saturated += share;
    if (bits & (MaskBit.cosmic | MaskBit.grown)) cosmic += share;
  }
  return (
    (cosmic > noticedShare ? Flag.cosmicRay : 0) |
    (bad > noticedShare ? Flag.badPixel : 0) |
    (saturated > noticedShare ? Flag.saturated : 0) |
    (lost > largestLoss ? Flag.weightLost : 0)
  );
}

/** Whether the next fibre on either side is saturated and near enough for the windows to meet. */
function saturatedBeside(column: Column, flags: Int32Array, k: number): boolean {
  return [k - 1, k + 1].some(
    (m) =>
      m >= 0 &&
      m < column.nFibre &&
      (flags[m] & Flag.saturated) !== 0 &&
      Math.abs(column.start[m] - column.start[k]) < column.nWindow,
  );
}
