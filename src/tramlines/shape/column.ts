/** One column of a flat, or of a science frame, under a shape: every fibre's profile with its slopes, and the joint fit of
 * flux, shift and width change. */
import { factorBand, inverseBand, solveBand } from "../../reference/banded.js";
import { legendreArgument, legendreValue } from "../../reference/legendre.js";
import { centroidOf, type ShapeTable, shapeAt, shapeTerms } from "../../reference/shape.js";

/** Fibres that take part, with their series; widths are the σ by which the shape is stretched. */
export interface Lines {
  nx: number;
  ny: number;
  nFibre: number;
  /** nFibre × nTrace, nFibre × nWidth: Legendre series, pixels. */
  trace: Float64Array;
  nTrace: number;
  width: Float64Array;
  nWidth: number;
}

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
const modelError = 0.003;

/** Inverse variances for `light` e⁻ on every row, background included. */
export function weighColumn(data: ColumnData, light: ArrayLike<number>): void {
  for (let y = 0; y < data.light.length; y++) {
    const seen = Math.max(light[y], 0);
    const variance = data.fixedVariance[y] + seen * data.variancePerElectron[y] + (modelError * seen) ** 2;
    data.inverseVariance[y] = data.good[y] ? 1 / variance : 0;
  }
}

/** Profiles of all fibres in one column. */
export interface ColumnProfiles {
  nFibre: number;
  /** Rows of a window. */
  n: number;
  /** Rows at each end of a window that the fibres' local unknowns do not reach. */
  margin: number;
  ny: number;
  /** nFibre: first row of the window, may lie outside the frame. */
  first: Int32Array;
  centre: Float64Array;
  width: Float64Array;
  /** nFibre × nShapeTerm */
  terms: Float64Array[];
  /** nFibre × n: weights, and their slopes by centre and by width (per pixel). */
  weights: Float64Array;
  byCentre: Float64Array;
  byWidth: Float64Array;
}

/** Evaluates all profiles in column `x` out to `reach` pixels, `localReach` of them for local unknowns. */
export function columnProfiles(
  lines: Lines,
  table: ShapeTable,
  x: number,
  reach: number,
  localReach = reach,
): ColumnProfiles {
  const { nFibre, ny } = lines;
  const n = 2 * Math.ceil(reach) + 1;
  const profiles: ColumnProfiles = {
    nFibre,
    n,
    margin: Math.max(0, Math.ceil(reach) - Math.ceil(localReach)),
    ny,
    first: new Int32Array(nFibre),
    centre: new Float64Array(nFibre),
    width: new Float64Array(nFibre),
    terms: [],
    weights: new Float64Array(nFibre * n),
    byCentre: new Float64Array(nFibre * n),
    byWidth: new Float64Array(nFibre * n),
  };
  const t = legendreArgument(x, lines.nx);
  for (let k = 0; k < nFibre; k++) {
    const centre = legendreValue(lines.trace, t, k * lines.nTrace, lines.nTrace);
    const width = legendreValue(lines.width, t, k * lines.nWidth, lines.nWidth);
    profiles.centre[k] = centre;
    profiles.width[k] = width;
    profiles.first[k] = Math.floor(centre + 0.5) - Math.ceil(reach);
    profiles.terms.push(shapeTerms(t, legendreArgument(centre, ny), width, table.referenceWidth));
    fillProfile(profiles, table, k);
  }
  return profiles;
}

function fillProfile(profiles: ColumnProfiles, table: ShapeTable, k: number): void {
  const { n, terms, width, centre, first } = profiles;
  const scale = table.referenceWidth / width[k];
  const origin = centroidOf(table, terms[k]);
  const edge = new Float64Array(2);
  let u = (first[k] - 0.5 - centre[k]) * scale;
  shapeAt(table, terms[k], u + origin, edge);
  for (let i = 0; i < n; i++) {
    const [below, slopeBelow, uBelow] = [edge[0], edge[1], u];
    u = (first[k] + i + 0.5 - centre[k]) * scale;
    shapeAt(table, terms[k], u + origin, edge);
    profiles.weights[k * n + i] = edge[0] - below;
    profiles.byCentre[k * n + i] = -scale * (edge[1] - slopeBelow);
    profiles.byWidth[k * n + i] = -(u * edge[1] - uBelow * slopeBelow) / width[k];
  }
}

/** Σ f_k P_k on every row: [ny] e⁻. */
export function columnModel(profiles: ColumnProfiles, flux: Float64Array): Float64Array {
  const model = new Float64Array(profiles.ny);
  for (let k = 0; k < profiles.nFibre; k++) {
    forRows(profiles, k, (row, at) => {
      model[row] += flux[k] * profiles.weights[at];
    });
  }
  return model;
}

/** Local unknowns of each fibre: flux, and flux times shift, and flux times change of width, as far as asked for. */
export interface LocalSystem {
  nPar: number;
  halfBandwidth: number;
  /** (nFibre·nPar) × (halfBandwidth+1), as banded.ts lays it out. */
  band: Float64Array;
  rhs: Float64Array;
}

/** Derivatives of a column's pixels by the local unknowns: [nFibre × nPar × n], 0 beyond the local reach and off the frame. */
export function localDesign(profiles: ColumnProfiles, flux: Float64Array, nPar: number): Float64Array {
  const { nFibre, n, margin, first, ny } = profiles;
  const design = new Float64Array(nFibre * nPar * n);
  for (let k = 0; k < nFibre; k++) {
    const from = Math.max(margin, -first[k]);
    const to = Math.min(n - margin, ny - first[k]);
    const at = k * nPar * n;
    for (let i = from; i < to; i++) {
      design[at + i] = profiles.weights[k * n + i];
      if (nPar > 1) design[at + n + i] = flux[k] * profiles.byCentre[k * n + i];
      if (nPar > 2) design[at + 2 * n + i] = flux[k] * profiles.byWidth[k * n + i];
    }
  }
  return design;
}

/** Normal equations of the column's residuals [ny] in the fibres' local unknowns. `nPar`: 1 flux, 2 and shift, 3 and width. */
export function localSystem(
  profiles: ColumnProfiles,
  design: Float64Array,
  residual: Float64Array,
  inverseVariance: Float64Array,
  nPar: number,
): LocalSystem {
  const { nFibre, n, margin, first, ny } = profiles;
  const neighbours = overlapping(profiles);
  const halfBandwidth = nPar * (neighbours + 1) - 1;
  const row = halfBandwidth + 1;
  const band = new Float64Array(nFibre * nPar * row);
  const rhs = new Float64Array(nFibre * nPar);
  const weighted = new Float64Array(n);
  for (let k = 0; k < nFibre; k++) {
    const low = Math.max(margin, -first[k]);
    const high = Math.min(n - margin, ny - first[k]);
    for (let p = 0; p < nPar; p++) {
      const own = (k * nPar + p) * n;
      let sum = 0;
      for (let i = low; i < high; i++) {
        weighted[i] = design[own + i] * inverseVariance[first[k] + i];
        sum += weighted[i] * residual[first[k] + i];
      }
      rhs[k * nPar + p] = sum;
      for (let m = Math.max(0, k - neighbours); m <= k; m++) {
        const ahead = first[k] - first[m];
        const to = Math.min(high, n - margin - ahead);
        for (let q = 0; q < nPar && m * nPar + q <= k * nPar + p; q++) {
          const other = (m * nPar + q) * n + ahead;
          let product = 0;
          for (let i = low; i < to; i++) product += weighted[i] * design[other + i];
          band[(k * nPar + p) * row + (k - m) * nPar + p - q] = product;
        }
      }
    }
  }
  return { nPar, halfBandwidth, band, rhs };
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

/** Calls `visit` for the rows of fibre k's window that lie in the frame. */
export function forRows(profiles: ColumnProfiles, k: number, visit: (row: number, at: number) => void): void {
  const { n, first, ny } = profiles;
  const to = Math.min(first[k] + n, ny);
  for (let row = Math.max(first[k], 0); row < to; row++) visit(row, k * n + row - first[k]);
}

/** How many fibres further the last one stands whose local window meets a fibre's own. */
function overlapping({ first, n, margin, nFibre }: ColumnProfiles): number {
  let most = 0;
  for (let k = 0; k < nFibre; k++) {
    while (k - most - 1 >= 0 && first[k] - first[k - most - 1] < n - 2 * margin) most++;
  }
  return most;
}
