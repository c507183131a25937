/** A smooth background under fibres that are fitted in single columns: Σ b_ij P_i(x) P_j(y), x, y ∈ [−1, 1] over the frame. */
import { legendreArgument, legendreBasis, legendreValue } from "./legendre.js";

/** Orders in x and y. */
export const nBackgroundX = 3;
export const nBackgroundY = 5;
export const nBackground = nBackgroundX * nBackgroundY;

/** Series in y on column x of `nx`: [nBackgroundY]. */
export function backgroundSeries(background: Float64Array, x: number, nx: number): Float64Array {
  const inX = legendreBasis(legendreArgument(x, nx), nBackgroundX);
  return Float64Array.from({ length: nBackgroundY }, (_, j) =>
    inX.reduce((sum, p, i) => sum + p * background[i * nBackgroundY + j], 0),
  );
}

/** The background on every row of column x: [ny] e⁻. */
export function backgroundColumn(
  background: Float64Array,
  x: number,
  { nx, ny }: { nx: number; ny: number },
): Float64Array {
  const series = backgroundSeries(background, x, nx);
  return Float64Array.from({ length: ny }, (_, y) => legendreValue(series, legendreArgument(y, ny)));
}
