import { beforeAll, describe, expect, it } from "vitest";
import { type Kernels, loadKernels } from "../src/kernels/module.js";
import { addShapeNormals } from "../src/kernels/shapeNormal.js";
import { nShapeTerm, type ShapeTable } from "../src/reference/shape.js";
import { backgroundColumn, nBackground } from "../src/reference/shapeBackground.js";
import type { ShapeBasis } from "../src/reference/shapeBasis.js";
import { type ColumnData, emptyColumn } from "../src/reference/shapeColumn.js";
import { shapeNormal } from "../src/reference/shapeNormal.js";
import { columnModel, type Lines, wholeProfiles } from "../src/reference/shapeProfiles.js";
import { shapeBasis, tabulate } from "../src/tramlines/shape/basis.js";
import { hermiteBasis, hermiteStart } from "../src/tramlines/shape/hermiteBasis.js";
import { normalDeviate, seeded } from "./scene.js";
import { analyticLines } from "./tramlines/shape/analytic.js";

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

const ny = 77;
/** The first window begins below the frame, the last one ends above it. */
const lines = analyticLines(11, ny, 5.9, 8);
const background = Float64Array.from({ length: nBackground }, (_, i) => (i === 0 ? 19 : 1.5 * Math.sin(3 * i)));

/** Bell-shaped coefficients of splines, every term at work. */
function splineCoefficients(basis: ShapeBasis): Float64Array {
  const next = seeded(41);
  const c = new Float64Array(basis.nSpline * nShapeTerm);
  for (let j = 0; j < basis.nSpline; j++) {
    const middle = (j - (basis.nSpline - 1) / 2) * 0.42;
    c[j * nShapeTerm] = Math.exp(-0.5 * (middle / 1.05) ** 2) + 0.01 * Math.exp(-Math.abs(middle) / 3);
    for (let m = 1; m < nShapeTerm; m++) c[j * nShapeTerm + m] = 0.06 * (next() - 0.5) * c[j * nShapeTerm];
  }
  const whole = basis.whole.reduce((sum, w, j) => sum + w * c[j * nShapeTerm], 0);
  return c.map((value) => value / whole);
}

function drawColumn(table: ShapeTable, x: number): ColumnData {
  const next = seeded(900 + x);
  const profiles = wholeProfiles(lines, table, x);
  const flux = Float64Array.from({ length: lines.nFibre }, () => 300 * 60 ** next());
  const under = backgroundColumn(background, x, lines);
  const expected = columnModel(profiles, flux).map((light, y) => light + under[y]);
  const data = emptyColumn(x, ny);
  for (let y = 0; y < ny; y++) {
    data.good[y] = (y + x) % 9 === 2 ? 0 : 1;
    data.fixedVariance[y] = 9 + (y % 3);
    data.variancePerElectron[y] = 0.9 + 0.2 * next();
    // A cosmic ray for the clip to find.
    const light = expected[y] + Math.sqrt(expected[y] + 9) * normalDeviate(next) + (y === 40 ? 4000 : 0);
    data.light[y] = data.good[y] * light;
  }
  return data;
}

/** Sums of the reference over the columns, and what is lost in rounding: a share of the diagonals before elimination. */
function wantedOf(table: ShapeTable, basis: ShapeBasis, columns: ColumnData[], nPar: number, clip: number) {
  const n = basis.nSpline * nShapeTerm + nBackground + 1;
  const wanted = { normal: new Float64Array(n * n), chi2: 0, nGood: 0 };
  for (const column of columns) {
    const one = shapeNormal(lines, table, basis, background, column, nPar, clip);
    one.normal.forEach((value, i) => {
      wanted.normal[i] += value;
    });
    wanted.chi2 += one.chi2;
    wanted.nGood += one.nGood;
  }
  return wanted;
}

describe("normal equations of a shape's columns", () => {
  const cases: [string, () => [ShapeBasis, Float64Array]][] = [
    [
      "splines",
      () => {
        const basis = shapeBasis(1.1);
        return [basis, splineCoefficients(basis)];
      },
    ],
    ["a Gauss–Hermite series", () => [hermiteBasis(kernels, 1.1), hermiteStart()]],
  ];
  for (const [name, make] of cases) {
    for (const [nPar, clip] of [
      [3, 0],
      [3, 5],
      [2, 6],
      [1, 6],
    ]) {
      it(`of ${name} are the reference's with ${nPar} unknowns a fibre eliminated, clip ${clip}`, () => {
        const [basis, coefficients] = make();
        const table = {
          ...tabulate(basis, coefficients),
          centroid: Float64Array.of(0.1, -0.02, 0.03, 0.04, -0.05, 0.01, 0.02),
        };
        const columns = [3, 31, 58, 59, 88].map((x) => drawColumn(table, x));
        const wanted = wantedOf(table, basis, columns, nPar, clip);
        const n = basis.nSpline * nShapeTerm + nBackground + 1;
        const found = new Float64Array(n * n);
        const sums = addShapeNormals(kernels, { lines, table, background, columns, nPar }, basis, clip, found);
        expect(sums.nGood).toBe(wanted.nGood);
        expect(Math.abs(sums.chi2 / wanted.chi2 - 1)).toBeLessThan(1e-9);
        // Elimination leaves down to 1e-5 of a diagonal: 1e-9 of what is left is rounding of 1e-14 before it.
        let worst = 0;
        for (let i = 0; i < n; i++) {
          for (let j = 0; j <= i; j++) {
            const scale = Math.sqrt(wanted.normal[i * n + i] * wanted.normal[j * n + j]);
            if (scale > 0) worst = Math.max(worst, Math.abs(found[i * n + j] - wanted.normal[i * n + j]) / scale);
          }
        }
        expect(worst).toBeLessThan(1e-8);
      });
    }
  }

  it("add up: columns at once are columns one by one, to the bit", () => {
    const basis = shapeBasis(1.1);
    const table = tabulate(basis, splineCoefficients(basis));
    const columns = [7, 44, 71].map((x) => drawColumn(table, x));
    const n = basis.nSpline * nShapeTerm + nBackground + 1;
    const [together, alone] = [new Float64Array(n * n), new Float64Array(n * n)];
    const problem = { lines: lines as Lines, table, background, nPar: 3 };
    addShapeNormals(kernels, { ...problem, columns }, basis, 6, together);
    for (const column of columns) addShapeNormals(kernels, { ...problem, columns: [column] }, basis, 6, alone);
    expect(alone).toEqual(together);
  });

  it("with no functions at all are those of the background alone", () => {
    const basis = shapeBasis(1.1);
    const table = tabulate(basis, splineCoefficients(basis));
    const columns = [15, 52].map((x) => drawColumn(table, x));
    const none: ShapeBasis = { ...basis, nSpline: 0, values: new Float64Array(0), whole: new Float64Array(0) };
    const wanted = wantedOf(table, none, columns, 1, 0);
    const n = nBackground + 1;
    const found = new Float64Array(n * n);
    addShapeNormals(kernels, { lines, table, background, columns, nPar: 1 }, none, 0, found);
    for (let i = 0; i < n; i++) {
      for (let j = 0; j <= i; j++) {
        const scale = Math.sqrt(wanted.normal[i * n + i] * wanted.normal[j * n + j]);
        expect(Math.abs(found[i * n + j] - wanted.normal[i * n + j])).toBeLessThan(1e-9 * scale);
      }
    }
  });
});
