/** Normal equations of one column in all coefficients of a shape and in a smooth background, with every fibre's flux (and
 * shift, and width) eliminated exactly: the Schur complement
 *
 *     N = GᵀG − XᵀD⁻¹X,   X = L⁻¹ AᵀG,   AᵀA = L D Lᵀ
 *
 * of the local unknowns with design A, everything over the pixels' noise. G has a column for each coefficient (a spline's
 * seven terms after another), for each order of the background, and one more that holds the residual: its products with
 * the others are the right-hand side. */
import { factorBand } from "./banded.js";
import { legendreArgument, legendreBasis } from "./legendre.js";
import { type LocalSystem, localDesign, localSystem } from "./localSystem.js";
import { rankUpdate } from "./rankUpdate.js";
import { centroidOf, nShapeTerm, type ShapeTable } from "./shape.js";
import { backgroundColumn, nBackground, nBackgroundX, nBackgroundY } from "./shapeBackground.js";
import { basisAt, emptyEdge, type ShapeBasis } from "./shapeBasis.js";
import { type ColumnData, settleColumn } from "./shapeColumn.js";
import { type ColumnProfiles, type Lines, wholeProfiles } from "./shapeProfiles.js";

export interface ColumnNormal {
  /** n × n with n = nSpline·7 + nBackground + 1; column ≤ row counts. */
  normal: Float64Array;
  /** Of the residual, the fluxes alone fitted. */
  chi2: number;
  /** Pixels that count. */
  nGood: number;
}

/** `background`: as shapeBackground.ts has it; `nPar`: local unknowns of a fibre, 1 to 3; `clip`: pixels whose residual
 * exceeds so many σ are left out, 0 for none. Weights of `data` follow the model. */
export function shapeNormal(
  lines: Lines,
  table: ShapeTable,
  basis: ShapeBasis,
  background: Float64Array,
  data: ColumnData,
  nPar: number,
  clip = 0,
): ColumnNormal {
  const { ny } = lines;
  const profiles = wholeProfiles(lines, table, data.x);
  const under = backgroundColumn(background, data.x, lines);
  const level = data.light.map((light, y) => light - under[y]);
  const { flux, model } = settleColumn(profiles, data, level, under);
  const residual = level.map((light, y) => light - model[y]);
  let [chi2, nGood] = [0, 0];
  for (let y = 0; y < ny; y++) {
    const square = residual[y] * residual[y] * data.inverseVariance[y];
    if (clip > 0 && square > clip * clip) data.inverseVariance[y] = 0;
    chi2 += residual[y] * residual[y] * data.inverseVariance[y];
    if (data.inverseVariance[y] > 0) nGood++;
  }
  const local = localDesign(profiles, flux, nPar);
  const system = localSystem(profiles, local, residual, data.inverseVariance, nPar);
  const n = basis.nSpline * nShapeTerm + nBackground + 1;
  const design = shapeDesign(lines, profiles, table, basis, flux, residual, data.x);
  const cross = crossProducts(profiles, local, design, n, nPar, data.inverseVariance);
  const normal = new Float64Array(n * n);
  rankUpdate(scaleRows(design, n, data.inverseVariance), ny, n, 1, normal);
  eliminate(system, cross, n, normal);
  return { normal, chi2, nGood };
}

/** Derivatives of every row by the unknowns, and the residual: [ny × n]. */
function shapeDesign(
  lines: Lines,
  profiles: ColumnProfiles,
  table: ShapeTable,
  basis: ShapeBasis,
  flux: Float64Array,
  residual: Float64Array,
  x: number,
): Float64Array {
  const { nx, ny } = lines;
  const nShape = basis.nSpline * nShapeTerm;
  const n = nShape + nBackground + 1;
  const design = new Float64Array(ny * n);
  const [below, above] = [emptyEdge(basis), emptyEdge(basis)];
  for (let k = 0; k < profiles.nFibre; k++) {
    const terms = profiles.terms[k];
    const scale = table.referenceWidth / profiles.width[k];
    const origin = centroidOf(table, terms);
    for (let row = Math.max(profiles.first[k], 0); row < Math.min(profiles.first[k] + profiles.n, ny); row++) {
      basisAt(basis, (row - 0.5 - profiles.centre[k]) * scale + origin, below);
      basisAt(basis, (row + 0.5 - profiles.centre[k]) * scale + origin, above);
      for (let j = 0; j < basis.nSpline; j++) {
        const light = flux[k] * (above.integral[j] - below.integral[j]);
        for (let m = 0; m < nShapeTerm; m++) design[row * n + j * nShapeTerm + m] += light * terms[m];
      }
    }
  }
  const inX = legendreBasis(legendreArgument(x, nx), nBackgroundX);
  for (let y = 0; y < ny; y++) {
    const inY = legendreBasis(legendreArgument(y, ny), nBackgroundY);
    inX.forEach((p, i) => {
      for (let j = 0; j < nBackgroundY; j++) design[y * n + nShape + i * nBackgroundY + j] = p * inY[j];
    });
    design[y * n + n - 1] = residual[y];
  }
  return design;
}

/** AᵀG: [nFibre·nPar × n]. */
function crossProducts(
  profiles: ColumnProfiles,
  local: Float64Array,
  design: Float64Array,
  n: number,
  nPar: number,
  inverseVariance: Float64Array,
): Float64Array {
  const cross = new Float64Array(profiles.nFibre * nPar * n);
  for (let unknown = 0; unknown < profiles.nFibre * nPar; unknown++) {
    const start = profiles.first[Math.floor(unknown / nPar)];
    for (let i = Math.max(0, -start); i < Math.min(profiles.n, profiles.ny - start); i++) {
      const own = inverseVariance[start + i] * local[unknown * profiles.n + i];
      for (let c = 0; c < n; c++) cross[unknown * n + c] += own * design[(start + i) * n + c];
    }
  }
  return cross;
}

/** normal −= Xᵀ D⁻¹ X. */
function eliminate(system: LocalSystem, cross: Float64Array, n: number, normal: Float64Array): void {
  const { band, halfBandwidth: b } = system;
  const nLocal = system.rhs.length;
  factorBand(band, nLocal, b);
  for (let i = 0; i < nLocal; i++) {
    for (let j = 1; j <= Math.min(i, b); j++) {
      for (let c = 0; c < n; c++) cross[i * n + c] -= band[i * (b + 1) + j] * cross[(i - j) * n + c];
    }
  }
  const inversePivots = Float64Array.from({ length: nLocal }, (_, i) => Math.max(band[i * (b + 1)], 0));
  rankUpdate(scaleRows(cross, n, inversePivots), nLocal, n, -1, normal);
}

/** Each row times the root of its weight. */
function scaleRows(rows: Float64Array, n: number, weights: Float64Array): Float64Array {
  return rows.map((value, at) => value * Math.sqrt(weights[Math.floor(at / n)]));
}
