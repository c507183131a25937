/** One column of a flat, or of a science frame, under known profiles: the joint fit of every fibre's flux, with variances that
 * follow from the model, and of its shift and change of width. */
import { factorBand, inverseBand, solveBand } from "./banded.js";
import { localDesign, localSystem } from "./localSystem.js";
import { type ColumnProfiles, columnModel } from "./shapeProfiles.js";

/** Pixels of one column: [ny]. */
export interface ColumnData {
  x: number;
  /** e⁻ */
  light: Float64Array;
  /** 1 where the pixel is good. */
  good: Uint8Array;
  /** e⁻²: variance without light. */
  fixedVariance: Float64Array;
  /** e⁻² per e⁻ of light. */
  variancePerElectron: Float64Array;
  /** e⁻⁻²: 0 where the pixel is not good; follows the model. */
  inverseVariance: Float64Array;
}

/** A column of which nothing is known yet. */
export function emptyColumn(x: number, ny: number): ColumnData {
  const zeros = () => new Float64Array(ny);
  return {
    x,
    light: zeros(),
    good: new Uint8Array(ny),
    fixedVariance: zeros(),
    variancePerElectron: zeros(),
    inverseVariance: zeros(),
  };
}

/** What no model of the light gets better than, as a share of it: pixels' response, and the form of the profile itself. */
export const modelError = 0.003;

/** Inverse variances for `light` e⁻ on every row, background included. */
export function weighColumn(data: ColumnData, light: ArrayLike<number>): void {
  for (let y = 0; y < data.light.length; y++) {
    const seen = Math.max(light[y], 0);
    const variance = data.fixedVariance[y] + seen * data.variancePerElectron[y] + (modelError * seen) ** 2;
    data.inverseVariance[y] = data.good[y] ? 1 / variance : 0;
  }
}

/** Fluxes and model of a column, with the weights that follow from them: from the data's noise first, then twice from the
 * model's. `level`: the light without the background `smooth`. */
export function settleColumn(
  profiles: ColumnProfiles,
  data: ColumnData,
  level: Float64Array,
  smooth: Float64Array,
): { flux: Float64Array; model: Float64Array } {
  weighColumn(data, data.light);
  let flux = columnFlux(profiles, level, data.inverseVariance);
  let model = columnModel(profiles, flux);
  for (let round = 0; round < 2; round++) {
    weighColumn(
      data,
      model.map((light, y) => light + smooth[y]),
    );
    flux = columnFlux(profiles, level, data.inverseVariance);
    model = columnModel(profiles, flux);
  }
  return { flux, model };
}

/** Fluxes of all fibres in one column, and as many local unknowns of each as are asked for. */
export interface ColumnFit {
  x: number;
  /** nFibre, e⁻: fluxes alone fitted. */
  flux: Float64Array;
  /** ny, e⁻: their light, without background. */
  model: Float64Array;
  /** ny, e⁻⁻², 0 where the pixel is not good: what noise this model has. */
  inverseVariance: Float64Array;
  /** nFibre × nPar: what the residual adds to flux (e⁻), centre and width (pixels), fitted together; and their variances, 0 for
   * what no pixel tells. */
  solution: Float64Array;
  variance: Float64Array;
}

/** Fits one column. `under`: the background, [ny] e⁻. */
export function fitColumn(profiles: ColumnProfiles, data: ColumnData, under: Float64Array, nPar: number): ColumnFit {
  const level = data.light.map((light, y) => light - under[y]);
  const { flux, model } = settleColumn(profiles, data, level, under);
  const residual = level.map((light, y) => light - model[y]);
  const { value, variance } = solveLocal(profiles, flux, residual, data.inverseVariance, nPar);
  return { x: data.x, flux, model, inverseVariance: data.inverseVariance, solution: value, variance };
}

/** Local unknowns of all fibres at once, [nFibre × nPar], with their variances. */
export function solveLocal(
  profiles: ColumnProfiles,
  flux: Float64Array,
  residual: Float64Array,
  inverseVariance: Float64Array,
  nPar: number,
): { value: Float64Array; variance: Float64Array } {
  const design = localDesign(profiles, flux, nPar);
  const { band, rhs, halfBandwidth } = localSystem(profiles, design, residual, inverseVariance, nPar);
  factorBand(band, rhs.length, halfBandwidth);
  solveBand(band, rhs.length, halfBandwidth, rhs);
  const inverse = inverseBand(band, rhs.length, halfBandwidth);
  return { value: rhs, variance: rhs.map((_, i) => inverse[i * (halfBandwidth + 1)]) };
}

/** Joint fluxes of the column: [nFibre] e⁻. */
export function columnFlux(profiles: ColumnProfiles, light: Float64Array, inverseVariance: Float64Array): Float64Array {
  const design = localDesign(profiles, profiles.centre, 1);
  const { band, rhs, halfBandwidth } = localSystem(profiles, design, light, inverseVariance, 1);
  factorBand(band, profiles.nFibre, halfBandwidth);
  solveBand(band, profiles.nFibre, halfBandwidth, rhs);
  return rhs;
}
