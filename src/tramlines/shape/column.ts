/** One column of a flat, or of a science frame, under a shape: every fibre's profile with its slopes, and the joint fit of
 * flux, shift and width change. */
import { factorBand, solveBand } from "../../reference/banded.js";
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

/** Evaluates all profiles in column `x` out to `reach` pixels. */
export function columnProfiles(lines: Lines, table: ShapeTable, x: number, reach: number): ColumnProfiles {
  const { nFibre, ny } = lines;
  const n = 2 * Math.ceil(reach) + 1;
  const profiles: ColumnProfiles = {
    nFibre,
    n,
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

/** Normal equations of the column's residuals [ny] in the fibres' local unknowns. `nPar`: 1 flux, 2 and shift, 3 and width. */
export function localSystem(
  profiles: ColumnProfiles,
  flux: Float64Array,
  residual: Float64Array,
  inverseVariance: Float64Array,
  nPar: number,
): LocalSystem {
  const { nFibre, n, first } = profiles;
  const neighbours = overlapping(profiles);
  const halfBandwidth = nPar * (neighbours + 1) - 1;
  const row = halfBandwidth + 1;
  const band = new Float64Array(nFibre * nPar * row);
  const rhs = new Float64Array(nFibre * nPar);
  const design = (k: number, p: number, at: number) =>
    p === 0 ? profiles.weights[at] : flux[k] * (p === 1 ? profiles.byCentre[at] : profiles.byWidth[at]);
  for (let k = 0; k < nFibre; k++) {
    for (let m = Math.max(0, k - neighbours); m <= k; m++) {
      const from = Math.max(first[k], first[m], 0);
      const to = Math.min(first[m] + n, profiles.ny);
      for (let y = from; y < to; y++) {
        const w = inverseVariance[y];
        if (w === 0) continue;
        const [atK, atM] = [k * n + y - first[k], m * n + y - first[m]];
        for (let p = 0; p < nPar; p++) {
          const own = w * design(k, p, atK);
          for (let q = 0; q < nPar && m * nPar + q <= k * nPar + p; q++) {
            band[(k * nPar + p) * row + (k - m) * nPar + p - q] += own * design(m, q, atM);
          }
          if (m === k) rhs[k * nPar + p] += own * residual[y];
        }
      }
    }
  }
  return { nPar, halfBandwidth, band, rhs };
}

/** Joint fluxes of the column: [nFibre] e⁻. */
export function columnFlux(profiles: ColumnProfiles, light: Float64Array, inverseVariance: Float64Array): Float64Array {
  const unit = new Float64Array(profiles.nFibre).fill(1);
  const { band, rhs, halfBandwidth } = localSystem(profiles, unit, light, inverseVariance, 1);
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

/** How many fibres further the last one stands whose window meets a fibre's own. */
function overlapping({ first, n, nFibre }: ColumnProfiles): number {
  let most = 0;
  for (let k = 0; k < nFibre; k++) while (k - most - 1 >= 0 && first[k] - first[k - most - 1] < n) most++;
  return most;
}
