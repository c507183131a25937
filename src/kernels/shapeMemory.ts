/** How much memory a fit of single columns takes, piece by piece, and where its columns' windows lie. */
import { legendreArgument, legendreBasis } from "../reference/legendre.js";
import { overlapping } from "../reference/localSystem.js";
import type { ShapeTable } from "../reference/shape.js";
import { nBackgroundY } from "../reference/shapeBackground.js";
import type { ShapeBasis } from "../reference/shapeBasis.js";
import type { ColumnData } from "../reference/shapeColumn.js";
import { type Lines, wholeReach } from "../reference/shapeProfiles.js";
import { ShapeNumbers, ShapeWord } from "./shape-words.js";

/** Columns that a tile of the kernels holds. */
export const nLane = 2;
const fibreNumbers = 6;
const tableNumbers = 8;

/** Columns under profiles whose centres and widths `lines` tell, with a smooth background as shapeBackground.ts has it. */
export interface ShapeProblem {
  lines: Lines;
  table: ShapeTable;
  background: Float64Array;
  columns: ColumnData[];
  /** Local unknowns of a fibre: 1 flux, 2 and shift, 3 and width. */
  nPar: number;
}

/** Where the windows of a problem's columns lie. */
export interface Windows {
  /** nColumn × nFibre, pixels. */
  centre: Float64Array;
  width: Float64Array;
  nWindow: number;
  margin: number;
  /** How many fibres further a local window still meets another one's, in any column. */
  neighbours: number;
}

/** How many f64 each piece of the memory holds. */
export type Plan = [word: ShapeWord, length: number][];

export function sharedPlan({ lines, table, columns, nPar }: ShapeProblem, basis?: ShapeBasis): Plan {
  const { ny, nFibre } = lines;
  const n = columns.length;
  const nBlock = (basis?.nSpline ?? 0) + 2;
  const plan: Plan = [
    [ShapeWord.light, n * ny],
    [ShapeWord.fixedVariance, n * ny],
    [ShapeWord.variancePerElectron, n * ny],
    [ShapeWord.argument, n],
    [ShapeWord.centre, n * nFibre],
    [ShapeWord.width, n * nFibre],
    [ShapeWord.backgroundSeries, n * nBackgroundY],
    [ShapeWord.rowPolynomials, ny * nBackgroundY],
    [ShapeWord.table, table.values.length],
    [ShapeWord.centroid, table.centroid.length],
    [ShapeWord.flux, n * nFibre],
    [ShapeWord.model, n * ny],
    [ShapeWord.inverseVariance, n * ny],
    [ShapeWord.solution, n * nFibre * nPar],
    [ShapeWord.solutionVariance, n * nFibre * nPar],
    [ShapeWord.chi2, 2 * n],
    [ShapeWord.numbers, ShapeNumbers.count],
  ];
  if (basis === undefined) return plan;
  return [
    ...plan,
    [ShapeWord.basis, basis.values.length + 4],
    [ShapeWord.whole, basis.nSpline],
    [ShapeWord.begun, Math.ceil(basis.begun.length / 2)],
    [ShapeWord.normal, n * 8 * nBlock * (nBlock + 1)],
  ];
}

export function scratchPlan({ lines, table, nPar }: ShapeProblem, windows: Windows, basis?: ShapeBasis): Plan {
  const { ny, nFibre } = lines;
  const { nWindow, neighbours } = windows;
  const nLocal = nFibre * nPar;
  // Fluxes alone are solved for first, in the same places.
  const nBand = nLocal * nPar * (neighbours + 1);
  const plan: Plan = [
    [ShapeWord.columnTable, nLane * table.n * tableNumbers],
    [ShapeWord.first, nLane * Math.ceil(nFibre / 2) + 1],
    [ShapeWord.fibre, nLane * nFibre * fibreNumbers],
    [ShapeWord.weights, nLane * nFibre * nWindow],
    [ShapeWord.byCentre, nLane * nFibre * nWindow],
    [ShapeWord.byWidth, nLane * nFibre * nWindow],
    [ShapeWord.local, nLane * nLocal * nWindow],
    [ShapeWord.level, nLane * ny],
    [ShapeWord.rootWeight, nLane * ny],
    [ShapeWord.scaled, nLane * ny],
    [ShapeWord.band, nLane * nBand],
    [ShapeWord.inverse, nLane * nBand],
    [ShapeWord.rhs, nLane * nLocal],
  ];
  if (basis === undefined) return plan;
  const n = 4 * (basis.nSpline + 2);
  return [
    ...plan,
    [ShapeWord.edges, 2 * (basis.nSpline + 2)],
    [ShapeWord.filled, basis.nSpline + 2],
    [ShapeWord.design, ny * n],
    [ShapeWord.cross, nLocal * n],
  ];
}

export function columnWindows({ lines, table, columns }: ShapeProblem): Windows {
  const { nFibre, nTrace, nWidth, trace, width } = lines;
  const { reach, localReach } = wholeReach(lines, table);
  const half = Math.ceil(reach);
  const windows: Windows = {
    centre: new Float64Array(columns.length * nFibre),
    width: new Float64Array(columns.length * nFibre),
    nWindow: 2 * half + 1,
    margin: Math.max(0, half - Math.ceil(localReach)),
    neighbours: 0,
  };
  const { nWindow: n, margin } = windows;
  columns.forEach(({ x }, i) => {
    const inX = legendreBasis(legendreArgument(x, lines.nx), Math.max(nTrace, nWidth));
    const centre = windows.centre.subarray(i * nFibre, (i + 1) * nFibre);
    for (let k = 0; k < nFibre; k++) {
      centre[k] = seriesAt(trace, k * nTrace, nTrace, inX);
      windows.width[i * nFibre + k] = seriesAt(width, k * nWidth, nWidth, inX);
    }
    const first = Int32Array.from(centre, (y) => Math.floor(y + 0.5) - half);
    windows.neighbours = Math.max(windows.neighbours, overlapping({ first, n, margin, nFibre }));
  });
  return windows;
}

function seriesAt(coef: Float64Array, from: number, n: number, polynomials: Float64Array): number {
  let sum = 0;
  for (let j = 0; j < n; j++) sum += coef[from + j] * polynomials[j];
  return sum;
}
