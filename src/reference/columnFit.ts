/** Joint fit of all fibres' fluxes in one column of a science frame: the readable twin of assembly/columnFit.ts. Unlike an
 * extraction it is to tell of shift, names and background, and nobody looks at single fluxes: a fixed number of rounds, and
 * pixels that the fit misses by too much go out at once, with their neighbours. */
import { type ColumnData, columnFlux } from "./shapeColumn.js";
import { type ColumnProfiles, columnModel } from "./shapeProfiles.js";

/** Rows over which light may be displaced by a misfit of the profile. */
const reachRows = 2;
const nRound = 3;

/** `level`: [ny] e⁻, the column's light less the background `under`; `profileError` ε: share of the light nearby by which pixels
 * may miss the model; `clip`: σ, 0 leaves nothing out. Sets the inverse variances of `data`. */
export function fitColumn(
  profiles: ColumnProfiles,
  data: ColumnData,
  level: Float64Array,
  under: Float64Array,
  profileError: number,
  clip = 0,
): { flux: Float64Array; residual: Float64Array } {
  let flux: Float64Array = new Float64Array(profiles.nFibre);
  let residual: Float64Array = level;
  for (let round = 0; round < nRound; round++) {
    weigh(data, round === 0 ? level : columnModel(profiles, flux), under, profileError);
    if (round > 1 && clip > 0) dropOutliers(data.inverseVariance, residual, clip);
    flux = columnFlux(profiles, level, data.inverseVariance);
    const model = columnModel(profiles, flux);
    residual = level.map((light, y) => light - model[y]);
  }
  return { flux, residual };
}

/** v = fixed + max(m + b, 0)/r + (ε · largest m within ± reachRows)². */
function weigh(data: ColumnData, light: Float64Array, under: Float64Array, profileError: number): void {
  data.inverseVariance.forEach((_, y) => {
    const near = light.subarray(Math.max(0, y - reachRows), y + reachRows + 1);
    const slack = profileError * Math.max(0, ...near);
    const photons = Math.max(light[y] + under[y], 0) * data.variancePerElectron[y];
    data.inverseVariance[y] = data.good[y] ? 1 / (data.fixedVariance[y] + photons + slack * slack) : 0;
  });
}

function dropOutliers(inverseVariance: Float64Array, residual: Float64Array, clip: number): void {
  const beyond = residual.map((miss, y) => (miss * miss * inverseVariance[y] > clip * clip ? 1 : 0));
  inverseVariance.forEach((_, y) => {
    if (beyond[y - 1] || beyond[y] || beyond[y + 1]) inverseVariance[y] = 0;
  });
}
