/** Profiles of all fibres in one column of the detector, with their slopes by centre and width. */
import { legendreArgument, legendreValue } from "./legendre.js";
import { centroidOf, type ShapeTable, shapeAt, shapeTerms } from "./shape.js";

/** Pixels, at a width of `localWidth`, to which fibres' local unknowns reach. */
const localPixels = 14;
const localWidth = 1.04;
/** A fibre's width changes by so much along it, at the most. */
const widthMargin = 1.1;

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

/** Calls `visit` for the rows of fibre k's window that lie in the frame. */
export function forRows(profiles: ColumnProfiles, k: number, visit: (row: number, at: number) => void): void {
  const { n, first, ny } = profiles;
  const to = Math.min(first[k] + n, ny);
  for (let row = Math.max(first[k], 0); row < to; row++) visit(row, k * n + row - first[k]);
}

/** Profiles out to their last trace of light; local unknowns as far as they matter. */
export function wholeProfiles(lines: Lines, table: ShapeTable, x: number): ColumnProfiles {
  const { reach, localReach } = wholeReach(lines, table);
  return columnProfiles(lines, table, x, reach, localReach);
}

/** Pixels to which the widest fibre's profile reaches, and to which its local unknowns do. */
export function wholeReach(lines: Lines, table: ShapeTable): { reach: number; localReach: number } {
  let widest = 0;
  for (let k = 0; k < lines.nFibre; k++) widest = Math.max(widest, lines.width[k * lines.nWidth]);
  const stretch = (widthMargin * widest) / table.referenceWidth;
  return { reach: -table.start * stretch, localReach: localPixels * (table.referenceWidth / localWidth) * stretch };
}
