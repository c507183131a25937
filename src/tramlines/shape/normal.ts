/** The profile step: all coefficients of a shape and a smooth background at once, by linear least squares over some columns,
 * with every fibre's flux, shift and width in each column eliminated exactly (Schur complement). Fluxes fitted in
 * turns with the shape would never converge: wings, neighbours and background trade light too well. */
import type { Kernels } from "../../kernels/module.js";
import { addShapeNormals } from "../../kernels/shapeNormal.js";
import { factorBand, solveBand } from "../../reference/banded.js";
import { nShapeTerm, type ShapeTable } from "../../reference/shape.js";
import { nBackground } from "../../reference/shapeBackground.js";
import type { ShapeBasis } from "../../reference/shapeBasis.js";
import type { ColumnData } from "../../reference/shapeColumn.js";
import type { Lines } from "../../reference/shapeProfiles.js";
import type { KnownShape } from "../tramlines.js";
import { addGauges, addPriors, normalise } from "./gauges.js";

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
  /** Unknowns and one more, which holds the residuals: their products with the design are the right-hand side. */
  private readonly n: number;
  /** n × n; column ≤ row is kept up. */
  private readonly normal: Float64Array;

  constructor(
    private readonly kernels: Kernels,
    private readonly basis: ShapeBasis,
  ) {
    this.nUnknown = basis.nSpline * nShapeTerm + nBackground;
    this.n = this.nUnknown + 1;
    this.normal = new Float64Array(this.n * this.n);
  }

  /** Adds columns under one state of the shape. `holdCentres`: eliminate fluxes alone. */
  add(
    lines: Lines,
    table: ShapeTable,
    background: Float64Array,
    columns: ColumnData[],
    holdCentres: boolean,
    clip = 0,
  ): void {
    const { kernels, basis, normal } = this;
    const problem = { lines, table, background, columns, nPar: holdCentres ? 1 : 3 };
    const { chi2, nGood } = addShapeNormals(kernels, problem, basis, clip, normal);
    this.chi2 += chi2;
    this.freedom += nGood - columns.length * lines.nFibre; // the residuals have fluxes alone fitted
  }

  /** What these columns alone say of the shape, at the state that they were added at: second derivatives of χ²/2 in the
   * shape's unknowns, the background eliminated. [nShape × nShape], lower triangle. */
  shapeInformation(): Float64Array {
    const { n, nUnknown } = this;
    const nShape = nUnknown - nBackground;
    const full = this.normal;
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

  /** Steps of all unknowns from `state`, priors and gauges applied.
   * The gauges keep a step from changing the norm, from shifting the shape and from widening it: those belong to flux,
   * centre and width of the fibres. Where another frame is `known` the fibres' widths are its own and do not follow, so
   * that a widening is the shape's to make. */
  solve(state: ShapeState, table: ShapeTable, known?: KnownShape): StepResult {
    const { nUnknown, n } = this;
    const normal = this.normal.slice();
    const rhs = normal.slice(nUnknown * n, nUnknown * n + nUnknown);
    addPriors(normal, rhs, n, this.basis, state.coefficients);
    if (known !== undefined) this.addInformation(normal, rhs, state, known);
    addGauges(normal, n, this.basis, table, known === undefined);
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
}
