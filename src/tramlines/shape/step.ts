/** The profile step: all coefficients of a shape and a smooth background at once, by linear least squares over some columns,
 * with every fibre's flux, shift and width in each column eliminated exactly (Schur complement). Fluxes fitted in
 * turns with the shape would never converge: wings, neighbours and background trade light too well. */
import type { Kernels } from "../../kernels/module.js";
import { NormalMatrix } from "../../kernels/rankUpdate.js";
import { factorBand, solveBand } from "../../reference/banded.js";
import { legendreArgument, legendreBasis, legendreValue } from "../../reference/legendre.js";
import { centroidOf, nShapeTerm, type ShapeTable } from "../../reference/shape.js";
import type { KnownShape } from "../tramlines.js";
import { basisAt, emptyEdge, type ShapeBasis } from "./basis.js";
import {
  type ColumnData,
  type ColumnProfiles,
  columnFlux,
  columnModel,
  columnProfiles,
  type Lines,
  type LocalSystem,
  localDesign,
  localSystem,
  weighColumn,
} from "./column.js";

/** Orders of the background in x and y. */
export const nBackgroundX = 3;
export const nBackgroundY = 5;
export const nBackground = nBackgroundX * nBackgroundY;
/** Pixels, at the basis's width, to which fibres' local unknowns reach. */
const localReach = 14;

/** By how much a frame's focus may differ from the flat's, relative: prior where widths are the shape's. */
const widening = 0.05;

/** Unknowns: shape coefficients [nSpline × nShapeTerm], then background. */
export interface ShapeState {
  coefficients: Float64Array;
  background: Float64Array;
}

export interface StepResult extends ShapeState {
  /** Before this step. */
  chi2: number;
  freedom: number;
}

/** Normal equations of many columns in the shape's unknowns; several frames may add to one. */
export class ShapeNormal {
  readonly nUnknown: number;
  chi2 = 0;
  freedom = 0;
  private readonly matrix: NormalMatrix;
  private readonly n: number;
  /** ny × nBackgroundY: Legendre polynomials of the rows. */
  private readonly inY: Float64Array;

  constructor(
    kernels: Kernels,
    private readonly basis: ShapeBasis,
    private readonly ny: number,
    nFibre: number,
  ) {
    this.nUnknown = basis.nSpline * nShapeTerm + nBackground;
    // One column more holds the residuals: their products with the design are the right-hand side.
    this.n = this.nUnknown + 1 + ((this.nUnknown + 1) % 2);
    this.inY = new Float64Array(ny * nBackgroundY);
    for (let y = 0; y < ny; y++) this.inY.set(legendreBasis(legendreArgument(y, ny), nBackgroundY), y * nBackgroundY);
    this.matrix = new NormalMatrix(kernels, this.n, Math.max(ny, 3 * nFibre));
  }

  /** Adds one column. `holdCentres`: eliminate fluxes alone. */
  add(
    lines: Lines,
    table: ShapeTable,
    background: Float64Array,
    data: ColumnData,
    holdCentres: boolean,
    clip = 0,
  ): void {
    const profiles = wholeProfiles(lines, table, data.x);
    const smooth = backgroundColumn(background, data.x, lines);
    const level = data.light.map((light, y) => light - smooth[y]);
    const { flux, model } = settleColumn(profiles, data, level, smooth);
    const residual = level.map((light, y) => light - model[y]);
    for (let y = 0; clip > 0 && y < this.ny; y++) {
      if (residual[y] * residual[y] * data.inverseVariance[y] > clip * clip) data.inverseVariance[y] = 0;
    }
    const nPar = holdCentres ? 1 : 3;
    const design = localDesign(profiles, flux, nPar);
    const local = localSystem(profiles, design, residual, data.inverseVariance, nPar);
    this.fillDesign(profiles, table, flux, data.x, residual, lines);
    const cross = this.crossProducts(profiles, design, nPar, data.inverseVariance);
    for (let y = 0; y < this.ny; y++) {
      this.matrix.weights[y] = data.inverseVariance[y];
      this.chi2 += residual[y] * residual[y] * data.inverseVariance[y];
      this.freedom += data.inverseVariance[y] > 0 ? 1 : 0;
    }
    this.freedom -= lines.nFibre; // the residual has fluxes alone fitted
    this.matrix.add(this.ny);
    this.eliminate(local, cross);
  }

  /** What these columns alone say of the shape, at the state that they were added at: second derivatives of χ²/2 in the
   * shape's unknowns, the background eliminated. [nShape × nShape], lower triangle. */
  shapeInformation(): Float64Array {
    const { n, nUnknown } = this;
    const nShape = nUnknown - nBackground;
    const full = this.matrix.normal;
    const band = new Float64Array(nBackground * nBackground);
    for (let i = 0; i < nBackground; i++) {
      for (let j = 0; j <= i; j++) band[i * nBackground + i - j] = full[(nShape + i) * n + nShape + j];
    }
    factorBand(band, nBackground, nBackground - 1);
    const information = new Float64Array(nShape * nShape);
    const solved = new Float64Array(nBackground);
    for (let i = 0; i < nShape; i++) {
      for (let b = 0; b < nBackground; b++) solved[b] = full[(nShape + b) * n + i];
      solveBand(band, nBackground, nBackground - 1, solved);
      for (let j = 0; j <= i; j++) {
        let sum = full[i * n + j];
        for (let b = 0; b < nBackground; b++) sum -= solved[b] * full[(nShape + b) * n + j];
        information[i * nShape + j] = sum;
      }
    }
    return information;
  }

  /** Adds what other frames said: `information` about the shape around the coefficients `best`, both as they left them. */
  private addInformation(normal: Float64Array, rhs: Float64Array, state: ShapeState, known: KnownShape): void {
    const { n } = this;
    const nShape = this.nUnknown - nBackground;
    for (let i = 0; i < nShape; i++) {
      for (let j = 0; j <= i; j++) {
        const value = known.information[i * nShape + j];
        normal[i * n + j] += value;
        rhs[i] += value * (known.best[j] - state.coefficients[j]);
        if (j < i) rhs[j] += value * (known.best[i] - state.coefficients[i]);
      }
    }
  }

  /** Steps of all unknowns from `state`, priors and gauges applied.
   * The gauges keep a step from changing the norm, from shifting the shape and from widening it: those belong to flux,
   * centre and width of the fibres. Where another frame is `known` the fibres' widths are its own and do not follow, so
   * that a widening is the shape's to make. */
  solve(state: ShapeState, table: ShapeTable, known?: KnownShape): StepResult {
    const { nUnknown, n } = this;
    const normal = this.matrix.normal.slice();
    const rhs = normal.slice(nUnknown * n, nUnknown * n + nUnknown);
    this.addPriors(normal, rhs, state);
    if (known !== undefined) this.addInformation(normal, rhs, state, known);
    this.addGauges(normal, table, known === undefined);
    const band = new Float64Array(nUnknown * nUnknown);
    for (let i = 0; i < nUnknown; i++) {
      for (let j = 0; j <= i; j++) band[i * nUnknown + i - j] = normal[i * n + j];
      band[i * nUnknown] *= 1 + 1e-12;
    }
    factorBand(band, nUnknown, nUnknown - 1);
    solveBand(band, nUnknown, nUnknown - 1, rhs);
    const nShape = this.basis.nSpline * nShapeTerm;
    const coefficients = state.coefficients.map((c, i) => c + rhs[i]);
    normalise(coefficients, this.basis);
    return {
      coefficients,
      background: state.background.map((b, i) => b + rhs[nShape + i]),
      chi2: this.chi2,
      freedom: this.freedom,
    };
  }

  /** Derivatives of every row by the unknowns, and the residual in the last column. */
  private fillDesign(
    profiles: ColumnProfiles,
    table: ShapeTable,
    flux: Float64Array,
    x: number,
    residual: Float64Array,
    lines: Lines,
  ): void {
    const { n, basis, ny, inY } = this;
    const nShape = basis.nSpline * nShapeTerm;
    const rows = this.matrix.rows;
    rows.fill(0, 0, ny * n);
    let [below, above] = [emptyEdge(basis), emptyEdge(basis)];
    for (let k = 0; k < profiles.nFibre; k++) {
      const terms = profiles.terms[k];
      const scale = table.referenceWidth / profiles.width[k];
      const origin = centroidOf(table, terms);
      const from = Math.max(profiles.first[k], 0);
      const to = Math.min(profiles.first[k] + profiles.n, ny);
      basisAt(basis, (from - 0.5 - profiles.centre[k]) * scale + origin, below);
      for (let row = from; row < to; row++) {
        basisAt(basis, (row + 0.5 - profiles.centre[k]) * scale + origin, above);
        for (let j = below.first; j <= above.last; j++) {
          const light = flux[k] * (above.integral[j] - below.integral[j]);
          const at = row * n + j * nShapeTerm;
          for (let m = 0; m < nShapeTerm; m++) rows[at + m] += light * terms[m];
        }
        [below, above] = [above, below];
      }
    }
    const inX = legendreBasis(legendreArgument(x, lines.nx), nBackgroundX);
    for (let y = 0; y < ny; y++) {
      for (let i = 0; i < nBackground; i++) {
        rows[y * n + nShape + i] = inX[(i / nBackgroundY) | 0] * inY[y * nBackgroundY + (i % nBackgroundY)];
      }
      rows[y * n + this.nUnknown] = residual[y];
    }
  }

  /** Local unknowns × (shape's unknowns and residual): Σ w · local · design. */
  private crossProducts(
    profiles: ColumnProfiles,
    local: Float64Array,
    nPar: number,
    inverseVariance: Float64Array,
  ): Float64Array {
    const { n, nUnknown } = this;
    const { first, margin, ny } = profiles;
    const rows = this.matrix.rows;
    const cross = new Float64Array(profiles.nFibre * nPar * n);
    for (let unknown = 0; unknown < profiles.nFibre * nPar; unknown++) {
      const start = first[(unknown / nPar) | 0];
      const to = Math.min(profiles.n - margin, ny - start);
      for (let i = Math.max(margin, -start); i < to; i++) {
        const own = inverseVariance[start + i] * local[unknown * profiles.n + i];
        if (own === 0) continue;
        const [out, from] = [unknown * n, (start + i) * n];
        for (let c = 0; c <= nUnknown; c++) cross[out + c] += own * rows[from + c];
      }
    }
    return cross;
  }

  /** normal −= Xᵀ D⁻¹ X with X = L⁻¹ · cross, from the local system's factors L D Lᵀ. */
  private eliminate(local: LocalSystem, cross: Float64Array): void {
    const { n } = this;
    const nLocal = local.rhs.length;
    const b = local.halfBandwidth;
    factorBand(local.band, nLocal, b);
    for (let i = 0; i < nLocal; i++) {
      for (let j = 1; j <= Math.min(i, b); j++) {
        const l = local.band[i * (b + 1) + j];
        if (l === 0) continue;
        const [to, from] = [i * n, (i - j) * n];
        for (let c = 0; c <= this.nUnknown; c++) cross[to + c] -= l * cross[from + c];
      }
      this.matrix.weights[i] = -local.band[i * (b + 1)];
    }
    this.matrix.rows.set(cross);
    this.matrix.add(nLocal);
  }

  private addPriors(normal: Float64Array, rhs: Float64Array, state: ShapeState): void {
    const { n, basis } = this;
    const c = state.coefficients;
    for (let j = 0; j < basis.nSpline; j++) {
      const sigma = Math.max(basis.priorShare[j] * Math.abs(c[j * nShapeTerm]), basis.priorSpread[j]);
      for (let m = 1; m < nShapeTerm; m++) {
        const i = j * nShapeTerm + m;
        normal[i * n + i] += 1 / (sigma * sigma);
        rhs[i] -= c[i] / (sigma * sigma);
      }
    }
  }

  private addGauges(normal: Float64Array, table: ShapeTable, widthsFollow: boolean): void {
    const { n, basis } = this;
    const [shift, width] = shiftAndWidth(basis, table);
    const gauges = [basis.whole, ...(basis.canMove ? [shift] : []), ...(basis.canMove && widthsFollow ? [width] : [])];
    for (let m = 0; m < nShapeTerm; m++) {
      let strength = 0;
      for (let j = 0; j < basis.nSpline; j++) {
        const i = j * nShapeTerm + m;
        strength = Math.max(strength, normal[i * n + i]);
      }
      // No stronger than the diagonal: what is lost in rounding beside a stiff gauge is lost to the shape.
      for (const gauge of gauges) this.stiffen(normal, m, gauge, strength / sumOfSquares(gauge));
      if (basis.canMove && !widthsFollow) this.stiffen(normal, m, width, 1 / (widening * stretchPower(table)) ** 2);
    }
  }

  /** normal += weight · g gᵀ for term m. */
  private stiffen(normal: Float64Array, m: number, gauge: Float64Array, weight: number): void {
    const { n, basis } = this;
    for (let j = 0; j < basis.nSpline; j++) {
      for (let i = 0; i <= j; i++) {
        normal[(j * nShapeTerm + m) * n + i * nShapeTerm + m] += weight * gauge[j] * gauge[i];
      }
    }
  }
}

function sumOfSquares(values: Float64Array): number {
  return values.reduce((sum, value) => sum + value * value, 0);
}

/** ∫ ((v c₀)′)² dv: what a widening by its own size measures along the direction of a widening. */
function stretchPower({ n, start, step, values }: ShapeTable): number {
  const at = (i: number) => (start + i * step) * values[i * 2 * nShapeTerm + nShapeTerm];
  let sum = 0;
  for (let i = 1; i < n - 1; i++) sum += (at(i + 1) - at(i - 1)) ** 2 / (4 * step);
  return sum;
}

/** ∫ β_j c₀′ dv and ∫ β_j (v c₀)′ dv for every spline: directions of a shift and of a change of width. */
function shiftAndWidth(basis: ShapeBasis, table: ShapeTable): [Float64Array, Float64Array] {
  const { nSpline, n, step, start } = basis;
  const [shift, width] = [new Float64Array(nSpline), new Float64Array(nSpline)];
  const slope = (i: number) => table.values[i * 2 * nShapeTerm + nShapeTerm];
  for (let i = 1; i < n - 1; i++) {
    const curvature = (slope(i + 1) - slope(i - 1)) / (2 * step);
    const v = start + i * step;
    for (let j = 0; j < nSpline; j++) {
      const value = basis.values[i * 2 * nSpline + nSpline + j];
      shift[j] += value * curvature * step;
      width[j] += value * (v * curvature + slope(i)) * step;
    }
  }
  return [shift, width];
}

/** The first term to unit integral, the others to zero integral. */
function normalise(c: Float64Array, basis: ShapeBasis): void {
  const integral = (m: number) => basis.whole.reduce((sum, whole, j) => sum + whole * c[j * nShapeTerm + m], 0);
  const unit = integral(0);
  for (let j = 0; j < basis.nSpline; j++) c[j * nShapeTerm] /= unit;
  for (let m = 1; m < nShapeTerm; m++) {
    const excess = integral(m);
    for (let j = 0; j < basis.nSpline; j++) c[j * nShapeTerm + m] -= excess * c[j * nShapeTerm];
  }
}

/** The background on every row of column x: [ny] e⁻. */
export function backgroundColumn(background: Float64Array, x: number, lines: Lines): Float64Array {
  const inX = legendreBasis(legendreArgument(x, lines.nx), nBackgroundX);
  const series = Float64Array.from({ length: nBackgroundY }, (_, j) =>
    inX.reduce((sum, p, i) => sum + p * background[i * nBackgroundY + j], 0),
  );
  return Float64Array.from({ length: lines.ny }, (_, y) => legendreValue(series, legendreArgument(y, lines.ny)));
}

/** Profiles out to their last trace of light; local unknowns as far as they matter. */
export function wholeProfiles(lines: Lines, table: ShapeTable, x: number): ColumnProfiles {
  const stretch = widest(lines, table);
  return columnProfiles(lines, table, x, -table.start * stretch, localReach * (table.referenceWidth / 1.04) * stretch);
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

/** The widest fibre's width over the reference. */
function widest(lines: Lines, table: ShapeTable): number {
  let most = 0;
  for (let k = 0; k < lines.nFibre; k++) most = Math.max(most, lines.width[k * lines.nWidth]);
  return (1.1 * most) / table.referenceWidth;
}
