/** Normal equations of a background Σ β_j P_j(y) in one column, with the fibres' fluxes eliminated (Schur complement):
 *
 *     M_jl = P_jᵀ W P_l − g_jᵀ N⁻¹ g_l,   r_j = P_jᵀ W r,   g_j = Aᵀ W P_j,   N = Aᵀ W A
 *
 * so that light which a fibre could hold as well counts for nothing; r is what fitted fluxes leave, Aᵀ W r = 0. */
import { factorBand, solveBand } from "./banded.js";
import { localDesign, localSystem } from "./localSystem.js";
import type { ColumnProfiles } from "./shapeProfiles.js";

/** `residual` r: [ny] e⁻; `inverseVariance` W: [ny] e⁻⁻²; `polynomials` P_j: [nY] of [ny]. Returns M, lower triangle row by
 * row, then r_j. */
export function backgroundNormal(
  profiles: ColumnProfiles,
  residual: Float64Array,
  inverseVariance: Float64Array,
  polynomials: Float64Array[],
): Float64Array {
  const design = localDesign(profiles, profiles.centre, 1);
  const projected = polynomials.map((values) => localSystem(profiles, design, values, inverseVariance, 1).rhs);
  const { band, halfBandwidth } = localSystem(profiles, design, residual, inverseVariance, 1);
  factorBand(band, profiles.nFibre, halfBandwidth);
  const solved = projected.map((values) => values.slice());
  for (const values of solved) solveBand(band, profiles.nFibre, halfBandwidth, values);
  const product = (a: Float64Array, b: Float64Array) => a.reduce((sum, value, i) => sum + value * b[i], 0);
  const weighted = polynomials.map((p) => p.map((value, y) => value * inverseVariance[y]));
  const matrix = weighted.flatMap((p, j) =>
    weighted.slice(0, j + 1).map((_, l) => product(p, polynomials[l]) - product(projected[l], solved[j])),
  );
  return Float64Array.from([...matrix, ...weighted.map((p) => product(p, residual))]);
}
