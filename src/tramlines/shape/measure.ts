/** A profile of any form from the fibre flat itself: shape and geometry in turns, each with everything else eliminated. */
import type { Kernels } from "../../kernels/module.js";
import { factorBand, solveBand } from "../../reference/banded.js";
import { median } from "../../reference/median.js";
import { nShapeTerm, type ShapeTable } from "../../reference/shape.js";
import { nBackground } from "../../reference/shapeBackground.js";
import type { ShapeBasis } from "../../reference/shapeBasis.js";
import { type ColumnData, emptyColumn } from "../../reference/shapeColumn.js";
import type { Lines } from "../../reference/shapeProfiles.js";
import { TraceError } from "../errors.js";
import { type Flat, pixelVariance } from "../flat.js";
import { activeFibres, linesOf } from "../profileTable.js";
import type { KnownShape, ShapeProfile, Tramlines } from "../tramlines.js";
import { shapeBasis, tabulate } from "./basis.js";
import { referToCentroid } from "./centroid.js";
import { fittingColumns } from "./columns.js";
import { applyGeometry, measureColumns, type TraceScatter } from "./geometry.js";
import { hermiteBasis, hermiteStart } from "./hermiteBasis.js";
import { ShapeNormal, type ShapeState } from "./normal.js";

/** Columns of the flat that each round looks at, for the shape and for the geometry; the last round's numbers stand. */
const shapeColumns = [32, 32, 32, 96];
const geometryColumns = [48, 48, 64, 128];
const leastWidthTerms = 4;
/** Share of the light with which the wings begin, before anything is measured. */
const startWing = 0.02;

export interface MeasuredShape {
  table: ShapeTable;
  lines: Lines;
  basis: ShapeBasis;
  state: ShapeState;
  /** The flat's own word on the shape, for frames that refine it. */
  known: KnownShape;
  /** Of the last round. */
  scatter: TraceScatter;
  /** χ² per degree of freedom before each step. */
  history: number[];
}

/** The shape of `kind` from a combined flat whose tramlines were traced with Gaussians.
 * @throws TraceError when the flat does not tell it. */
export function measureShape(
  kernels: Kernels,
  flat: Flat,
  tramlines: Tramlines,
  kind: ShapeProfile["kind"] = "empirical",
): MeasuredShape {
  const lines = widthRoom(linesOf(tramlines, activeFibres(tramlines)), leastWidthTerms);
  const middleWidths = Array.from({ length: lines.nFibre }, (_, k) => lines.width[k * lines.nWidth]);
  const referenceWidth = median(middleWidths);
  const basis = kind === "hermite" ? hermiteBasis(kernels, referenceWidth) : shapeBasis(referenceWidth);
  let state: ShapeState = {
    coefficients: kind === "hermite" ? hermiteStart() : startCoefficients(kernels, basis),
    background: new Float64Array(nBackground),
  };
  let table = tabulate(basis, state.coefficients);
  const history: number[] = [];
  let scatter: TraceScatter = { rms: new Float64Array(lines.nFibre), nPoint: new Int32Array(lines.nFibre) };
  let information: Float64Array = new Float64Array(0);
  for (let round = 0; round < shapeColumns.length; round++) {
    const normal = new ShapeNormal(kernels, basis);
    const telling = flatColumns(flat, fittingColumns(flat.nx, shapeColumns[round], round));
    normal.add(lines, table, state.background, telling, false, round > 0 ? 6 : 0);
    const step = normal.solve(state, table);
    history.push(step.chi2 / step.freedom);
    if (!step.coefficients.every(Number.isFinite)) {
      throw new TraceError(
        `${flat.name}: its light does not tell the ${kind} profile (misfit ${(step.chi2 / step.freedom).toFixed(1)}); trace it with --profile gaussian.`,
      );
    }
    information = normal.shapeInformation();
    state = step;
    table = tabulate(basis, state.coefficients);
    const columns = flatColumns(flat, fittingColumns(flat.nx, geometryColumns[round], round));
    const geometry = measureColumns(kernels, lines, table, state.background, columns);
    scatter = applyGeometry(kernels, lines, geometry, referenceWidth);
  }
  const known = { best: state.coefficients, information };
  return { ...referToCentroid(kernels, lines, table), basis, state, known, history, scatter };
}

/** Columns of a combined flat, with what makes their variances. */
export function flatColumns(flat: Flat, which: number[]): ColumnData[] {
  const { nx, ny, frame } = flat;
  const columns = which.map((x) => emptyColumn(x, ny));
  for (let y = 0; y < ny; y++) {
    for (const column of columns) {
      const at = y * nx + column.x;
      const n = flat.nUsed[at];
      const good = flat.mask[at] === 0 && n > 0 && Number.isFinite(flat.electrons[at]);
      column.good[y] = good ? 1 : 0;
      column.light[y] = good ? flat.electrons[at] : 0;
      column.fixedVariance[y] = pixelVariance(frame, at, 0) / Math.max(n, 1);
      column.variancePerElectron[y] = (frame.noise.inverseResponse?.[at] ?? 1) / Math.max(n, 1);
    }
  }
  return columns;
}

/** Series of the active fibres, their widths with room for `nWidth` terms at least. */
function widthRoom(lines: Lines, nWidth: number): Lines {
  if (lines.nWidth >= nWidth) return lines;
  const width = new Float64Array(lines.nFibre * nWidth);
  for (let k = 0; k < lines.nFibre; k++) {
    width.set(lines.width.subarray(k * lines.nWidth, (k + 1) * lines.nWidth), k * nWidth);
  }
  return { ...lines, width, nWidth };
}

/** A Gaussian with a little wing, as far as splines can follow: least squares on the cumulative profile. */
function startCoefficients(kernels: Kernels, basis: ShapeBasis): Float64Array {
  const { nSpline, n, start, step, referenceWidth } = basis;
  const call = kernels.workbench(0).call;
  const band = new Float64Array(nSpline * nSpline);
  const rhs = new Float64Array(nSpline);
  for (let i = 0; i < n; i += 4) {
    const v = start + i * step;
    const core = 0.5 + 0.5 * call.erf((v / referenceWidth) * Math.SQRT1_2);
    const u = 1 / (1 + Math.abs(v) / (5 * referenceWidth));
    const wing = v > 0 ? 1 - 0.5 * u * u * u : 0.5 * u * u * u;
    const target = (1 - startWing) * core + startWing * wing;
    const row = basis.values.subarray(i * 2 * nSpline, i * 2 * nSpline + nSpline);
    for (let j = 0; j < nSpline; j++) {
      rhs[j] += row[j] * target;
      for (let m = 0; m <= j; m++) band[j * nSpline + j - m] += row[j] * row[m];
    }
  }
  factorBand(band, nSpline, nSpline - 1);
  solveBand(band, nSpline, nSpline - 1, rhs);
  const coefficients = new Float64Array(nSpline * nShapeTerm);
  for (let j = 0; j < nSpline; j++) coefficients[j * nShapeTerm] = rhs[j];
  return coefficients;
}
