/** Light of a column's fibres: in the windows, and of the far wings beside them. A wing holds a per cent of its fibre's light
 * at most, so the fit takes it as known from the fluxes before: each round of the fit makes its error a hundred times less. */
import { type Column, windowFirst } from "./column.js";

export interface ColumnLight {
  /** nRow, e⁻: light of the fibres in their windows. */
  model: Float64Array;
  /** nRow, e⁻: light of their wings outside. */
  wings: Float64Array;
}

export function noLight(column: Column): ColumnLight {
  return { model: new Float64Array(column.nRow), wings: new Float64Array(column.nRow) };
}

/** Adds the light of fibres k0 … k1 − 1 with the fluxes `flux` [nFibre], e⁻. */
export function addLight(
  column: Column,
  light: ColumnLight,
  flux: ArrayLike<number>,
  k0: number,
  k1: number,
  parts: { windows: boolean; wings: boolean },
): void {
  for (let k = k0; k < k1; k++) {
    if (parts.windows) addWindowLight(column, light.model, k, flux[k]);
    if (parts.wings) addWingLight(column, light.wings, k, flux[k]);
  }
}

function addWindowLight(column: Column, model: Float64Array, k: number, flux: number): void {
  const { nWindow, weights } = column;
  const first = windowFirst(column, k);
  for (let i = 0; i < nWindow; i++) model[first + i] += flux * weights[k * nWindow + i];
}

function addWingLight(column: Column, rows: Float64Array, k: number, flux: number): void {
  const { nWindow, wing, wings } = column;
  const first = windowFirst(column, k);
  for (let i = 0; i < wing; i++) rows[first - wing + i] += flux * wings[2 * k * wing + i];
  for (let i = 0; i < wing; i++) rows[first + nWindow + i] += flux * wings[(2 * k + 1) * wing + i];
}
