import { beforeAll, describe, expect, it } from "vitest";
import { type Kernels, loadKernels } from "../../../src/kernels/module.js";
import { legendreArgument, legendreBasis } from "../../../src/reference/legendre.js";
import { nShapeTerm, type ShapeTable, shapeWeights } from "../../../src/reference/shape.js";
import { backgroundColumn, nBackground, nBackgroundX, nBackgroundY } from "../../../src/reference/shapeBackground.js";
import { type ColumnData, settleColumn } from "../../../src/reference/shapeColumn.js";
import { columnModel, type Lines, wholeProfiles } from "../../../src/reference/shapeProfiles.js";
import { shapeBasis, tabulate } from "../../../src/tramlines/shape/basis.js";
import { ShapeNormal, type ShapeState } from "../../../src/tramlines/shape/normal.js";
import { judgeMissing, python } from "../../judges.js";
import { normalDeviate, seeded } from "../../scene.js";
import { analyticLines } from "./analytic.js";

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

const nFibre = 8;
const ny = 84;
const columns = [7, 29, 54, 80];
const lines = uneven(analyticLines(nFibre, ny, 5.3, 14));
const basis = shapeBasis(1.1);
const nShape = basis.nSpline * nShapeTerm;

/** A gap in the middle, so that the background can be told from wings. */
function uneven(plain: Lines): Lines {
  return { ...plain, trace: plain.trace.map((c, i) => (i % 3 === 0 && i >= 12 ? c + 16 : c)) };
}

/** Coefficients of a bell: each spline's own is the bell's height at the spline's middle. On top a `wing`, and other terms
 * of up to half of `spread` of the first. */
function bellCoefficients(seed: number, wing = 0.008, spread = 0.02): Float64Array {
  const next = seeded(seed);
  const c = new Float64Array(nShape);
  for (let j = 0; j < basis.nSpline; j++) {
    const middle = middleOf(j);
    c[j * nShapeTerm] = Math.exp(-0.5 * (middle / 1.05) ** 2) + wing * Math.exp(-Math.abs(middle) / 4);
    for (let m = 1; m < nShapeTerm; m++) c[j * nShapeTerm + m] = spread * (next() - 0.5) * c[j * nShapeTerm];
  }
  const whole = (m: number) => basis.whole.reduce((sum, w, j) => sum + w * c[j * nShapeTerm + m], 0);
  const unit = whole(0);
  for (let j = 0; j < basis.nSpline; j++) c[j * nShapeTerm] /= unit;
  const excess = Array.from({ length: nShapeTerm }, (_, m) => whole(m));
  for (let j = 0; j < basis.nSpline; j++) {
    for (let m = 1; m < nShapeTerm; m++) c[j * nShapeTerm + m] -= excess[m] * c[j * nShapeTerm];
  }
  return c;
}

function middleOf(j: number): number {
  let [sum, moment] = [0, 0];
  for (let i = 0; i < basis.n; i++) {
    const value = basis.values[i * 2 * basis.nSpline + basis.nSpline + j];
    sum += value;
    moment += value * (basis.start + i * basis.step);
  }
  return moment / sum;
}

const background = Float64Array.from({ length: nBackground }, (_, i) => (i === 0 ? 14 : 1.5 * Math.sin(3 * i)));

/** Light of the shape `coefficients` with noise; every seventh pixel is bad. */
function drawColumn(coefficients: Float64Array, x: number, seed: number): ColumnData {
  const next = seeded(seed);
  const profiles = wholeProfiles(lines, tabulate(basis, coefficients), x);
  const flux = Float64Array.from({ length: nFibre }, (_, k) => 4000 + 9000 * Math.abs(Math.sin(2.3 * k + x)));
  const smooth = backgroundColumn(background, x, lines);
  const expected = columnModel(profiles, flux).map((light, y) => light + smooth[y]);
  const fixedVariance = Float64Array.from({ length: ny }, (_, y) => 9 + (y % 3));
  return {
    x,
    light: expected.map((light, y) => light + Math.sqrt(light + fixedVariance[y]) * normalDeviate(next)),
    good: Uint8Array.from({ length: ny }, (_, y) => ((y + x) % 7 === 2 ? 0 : 1)),
    fixedVariance,
    variancePerElectron: new Float64Array(ny).fill(1),
    inverseVariance: new Float64Array(ny),
  };
}

/** The light is linear in the coefficients: a table of each of them alone is its derivative. */
const changed = Array.from({ length: nShape }, (_, i) => {
  const unit = new Float64Array(nShape);
  unit[i] = 1;
  return tabulate(basis, unit);
});

interface Dense {
  /** Rows of all columns together × unknowns: shape, background, then local ones of each column. */
  design: number[][];
  weights: number[];
  residual: number[];
  nPar: number;
}

/** The same problem with nothing eliminated. */
function denseProblem(coefficients: Float64Array, smooth: Float64Array, data: ColumnData[], nPar: number): Dense {
  const table = tabulate(basis, coefficients);
  const dense: Dense = { design: [], weights: [], residual: [], nPar };
  data.forEach((column, c) => {
    const profiles = wholeProfiles(lines, table, column.x);
    const under = backgroundColumn(smooth, column.x, lines);
    const level = column.light.map((light, y) => light - under[y]);
    const weighed = { ...column, inverseVariance: new Float64Array(ny) };
    const { flux, model } = settleColumn(profiles, weighed, level, under);
    const shapeOf = (shape: ShapeTable, k: number) =>
      shapeWeights(shape, profiles.terms[k], profiles.centre[k], profiles.width[k], profiles.first[k], profiles.n);
    const byCoefficient = changed.map((shape) => {
      const light = new Float64Array(ny);
      for (let k = 0; k < nFibre; k++) {
        shapeOf(shape, k).forEach((weight, i) => {
          const y = profiles.first[k] + i;
          if (y >= 0 && y < ny) light[y] += flux[k] * weight;
        });
      }
      return light;
    });
    const inX = legendreBasis(legendreArgument(column.x, lines.nx), nBackgroundX);
    for (let y = 0; y < ny; y++) {
      const inY = legendreBasis(legendreArgument(y, ny), nBackgroundY);
      const local = new Array(nFibre * nPar * data.length).fill(0);
      for (let k = 0; k < nFibre; k++) {
        const i = y - profiles.first[k];
        if (i < profiles.margin || i >= profiles.n - profiles.margin) continue;
        const slopes = [profiles.weights, profiles.byCentre, profiles.byWidth];
        for (let p = 0; p < nPar; p++) {
          local[(c * nFibre + k) * nPar + p] = slopes[p][k * profiles.n + i] * (p === 0 ? 1 : flux[k]);
        }
      }
      const smoothTerms = Array.from(inX, (px) => Array.from(inY, (py) => px * py)).flat();
      dense.design.push([...byCoefficient.map((light) => light[y]), ...smoothTerms, ...local]);
      dense.weights.push(weighed.inverseVariance[y]);
      dense.residual.push(level[y] - model[y]);
    }
  });
  return dense;
}

function addAll(normal: ShapeNormal, coefficients: Float64Array, data: ColumnData[], hold: boolean): ShapeTable {
  const table = tabulate(basis, coefficients);
  normal.add(lines, table, background, data, hold);
  return table;
}

describe.skipIf(judgeMissing("scipy"))("normal equations of the shape against a dense problem (numpy)", () => {
  const schur = `
import json,sys,numpy as np
a=json.load(sys.stdin);A=np.array(a['design']);s=a['nShape']
root=np.sqrt(np.array(a['weights']))[:,None];A=A*root
q,r=np.linalg.qr(A[:,s:]);rest=A[:,:s]-q@(q.T@A[:,:s])
print(json.dumps((rest.T@rest).tolist()))`;

  for (const [name, hold, nPar] of [
    ["fluxes, shifts and widths", false, 3],
    ["fluxes alone", true, 1],
  ] as const) {
    it(`hold the Schur complement of background and ${name}`, () => {
      const truth = bellCoefficients(3);
      const start = bellCoefficients(8);
      const data = columns.map((x) => drawColumn(truth, x, x));
      const normal = new ShapeNormal(kernels, basis);
      addAll(normal, start, data, hold);
      const found = normal.shapeInformation();
      const dense = denseProblem(start, background, data, nPar);
      const wanted: number[][] = JSON.parse(python(schur, [], JSON.stringify({ ...dense, nShape })));
      // What is left of the elimination is a difference: rounding is a share of the matrix before it.
      const size = beforeElimination(dense);
      let [worst, largest] = [0, 0];
      for (let i = 0; i < nShape; i++) {
        for (let j = 0; j <= i; j++) {
          const scale = Math.sqrt(size[i] * size[j]) || 1;
          worst = Math.max(worst, Math.abs(found[i * nShape + j] - wanted[i][j]) / scale);
          largest = Math.max(largest, Math.abs(wanted[i][j]) / scale);
        }
      }
      expect(largest).toBeGreaterThan(0.02);
      expect(worst).toBeLessThan(1e-9);
    });
  }

  function beforeElimination({ design, weights }: Dense): Float64Array {
    return Float64Array.from({ length: nShape }, (_, i) =>
      design.reduce((sum, row, at) => sum + weights[at] * row[i] * row[i], 0),
    );
  }

  const optimum = `
import json,sys,numpy as np
from scipy.linalg import null_space
a=json.load(sys.stdin);A=np.array(a['design']);n=A.shape[1];s=a['nShape'];b=s+a['nBackground']
root=np.sqrt(np.array(a['weights']));A=A*root[:,None];r=np.array(a['residual'])*root
P=np.array(a['prior']);keep=P>0
A=np.vstack([A,np.diag(np.where(keep,P,0))[keep.nonzero()[0]][:, :n]]);r=np.concatenate([r,(P*np.array(a['pull']))[keep]])
G=np.array(a['gauges'])
q,_=np.linalg.qr(A[:,b:]);B=A[:,:b]-q@(q.T@A[:,:b]);r2=r-q@(q.T@r)
N=null_space(G)
z=np.linalg.lstsq(B@N,r2,rcond=None)[0];best=N@z
cost=lambda d:float(np.sum((r2-B@d)**2))
step=np.array(a['step'])
print(json.dumps([cost(np.zeros(b)),cost(best),cost(step),np.abs(G@step/np.linalg.norm(G,axis=1)/np.linalg.norm(step)).tolist()]))`;

  it("are solved to within a thousandth of the best step that keeps norm, place and width, priors in force", () => {
    const truth = bellCoefficients(3);
    const start = bellCoefficients(8, 0.02, 0.1);
    const data = columns.map((x) => drawColumn(truth, x, x));
    const normal = new ShapeNormal(kernels, basis);
    const table = addAll(normal, start, data, false);
    const result = normal.solve({ coefficients: start, background }, table);
    const step = [
      ...result.coefficients.map((c, i) => c - start[i]),
      ...result.background.map((b, i) => b - background[i]),
    ];
    const dense = denseProblem(start, background, data, 3);
    const [prior, pull] = priors(start, dense.design[0].length);
    const input = { ...dense, nShape, nBackground, step, prior, pull, gauges: gauges(table, step.length) };
    const [none, best, own, kept] = JSON.parse(python(optimum, [], JSON.stringify(input)));
    expect(none - best).toBeGreaterThan(100); // the step is worth taking
    expect(own - best).toBeGreaterThan(-1e-6 * none);
    expect((own - best) / (none - best)).toBeLessThan(1e-3);
    expect(kept.length).toBe(3 * nShapeTerm);
    for (const share of kept) expect(share).toBeLessThan(1e-4);
  });
});

/** 1/σ of each unknown's prior, and where it pulls: terms beyond the first to 0 within 20 % of the first's coefficient, in
 * the wings (4.2 px at σ = 1.04 px) within 5 %. */
function priors(c: Float64Array, n: number): [number[], number[]] {
  const [prior, pull] = [new Array<number>(n).fill(0), new Array<number>(n).fill(0)];
  for (let j = 0; j < basis.nSpline; j++) {
    const share = Math.abs(middleOf(j)) > 4.2 * (1.1 / 1.04) ? 0.05 : 0.2;
    for (let m = 1; m < nShapeTerm; m++) {
      prior[j * nShapeTerm + m] = 1 / (share * Math.abs(c[j * nShapeTerm]));
      pull[j * nShapeTerm + m] = -c[j * nShapeTerm + m];
    }
  }
  return [prior, pull];
}

/** Directions that a step of every term must not take: norm, and along the profile's slope and its stretch, by sums over
 * the table. */
function gauges(table: ShapeTable, n: number): number[][] {
  const kinds = [new Float64Array(basis.nSpline), new Float64Array(basis.nSpline), new Float64Array(basis.nSpline)];
  const c0 = (i: number) => table.values[i * 2 * nShapeTerm + nShapeTerm];
  for (let i = 1; i + 1 < basis.n; i++) {
    const v = basis.start + i * basis.step;
    const slope = (c0(i + 1) - c0(i - 1)) / (2 * basis.step);
    const stretch = ((v + basis.step) * c0(i + 1) - (v - basis.step) * c0(i - 1)) / (2 * basis.step);
    for (let j = 0; j < basis.nSpline; j++) {
      const spline = basis.values[i * 2 * basis.nSpline + basis.nSpline + j];
      [1, slope, stretch].forEach((factor, g) => {
        kinds[g][j] += spline * factor * basis.step;
      });
    }
  }
  return Array.from({ length: nShapeTerm }, (_, m) =>
    kinds.map((kind) => {
      const row = new Array<number>(n).fill(0);
      kind.forEach((value, j) => {
        row[j * nShapeTerm + m] = value;
      });
      return row;
    }),
  ).flat();
}

/** What of `c` lies along the gauges is taken from `truth`: with centres held no step could mend that. */
function withinGauges(c: Float64Array, truth: Float64Array): Float64Array {
  const away = c.map((value, i) => value - truth[i]);
  const unit: Float64Array[] = [];
  for (const row of gauges(tabulate(basis, truth), nShape)) {
    const direction = Float64Array.from(row);
    const dot = (a: Float64Array, b: Float64Array) => a.reduce((sum, value, i) => sum + value * b[i], 0);
    const remove = (from: Float64Array, one: Float64Array) => {
      const share = dot(from, one);
      from.forEach((value, i) => {
        from[i] = value - share * one[i];
      });
    };
    for (const one of unit) remove(direction, one);
    const length = Math.sqrt(dot(direction, direction));
    unit.push(direction.map((value) => value / length));
    remove(away, unit[unit.length - 1]);
  }
  return truth.map((value, i) => value + away[i]);
}

describe("a step of the shape", () => {
  it("brings a wrong shape's light next to the truth, norm 1 and 0 for the other terms", () => {
    const truth = bellCoefficients(3);
    let state: ShapeState = {
      coefficients: withinGauges(bellCoefficients(8, 0.02, 0.15), truth),
      background: new Float64Array(nBackground),
    };
    const many = Array.from({ length: 30 }, (_, i) => 1 + 3 * i);
    const before = worstWeight(state.coefficients, truth);
    for (let round = 0; round < 3; round++) {
      const normal = new ShapeNormal(kernels, basis);
      const table = tabulate(basis, state.coefficients);
      const drawn = many.map((x) => drawColumn(truth, x, 1000 + x));
      normal.add(lines, table, state.background, drawn, true);
      state = normal.solve(state, table);
    }
    const integrals = Array.from({ length: nShapeTerm }, (_, m) =>
      basis.whole.reduce((sum, w, j) => sum + w * state.coefficients[j * nShapeTerm + m], 0),
    );
    expect(integrals[0]).toBeCloseTo(1, 12);
    for (const integral of integrals.slice(1)) expect(Math.abs(integral)).toBeLessThan(1e-12);
    // 232 unknowns from 30 columns of 72 good pixels: the model errs by √(232/2160) of a pixel's noise, which is
    // √(0.35·9000)/9000 at the middle of a fibre: 0.002; the worst of hundreds lies four times as far off.
    expect(before).toBeGreaterThan(0.02);
    expect(worstWeight(state.coefficients, truth)).toBeLessThan(0.008);
  });

  it("counts χ² in units of what noise leaves: 1 per degree of freedom at the truth", () => {
    const truth = bellCoefficients(3);
    const normal = new ShapeNormal(kernels, basis);
    const table = tabulate(basis, truth);
    const drawn = Array.from({ length: 90 }, (_, x) => drawColumn(truth, x, 2000 + x));
    normal.add(lines, table, background, drawn, true);
    const { chi2, freedom } = normal.solve({ coefficients: truth, background }, table);
    expect(freedom).toBe(90 * (ny - 12 - nFibre));
    // The mean of ν squared normal deviates scatters by √(2/ν).
    expect(Math.abs(chi2 / freedom - 1)).toBeLessThan(4 * Math.sqrt(2 / freedom) + 0.02);
  });

  it("counts the same χ² when shifts and widths are eliminated: what is left has fluxes alone fitted", () => {
    const truth = bellCoefficients(3);
    const [held, free] = [true, false].map((hold) => {
      const normal = new ShapeNormal(kernels, basis);
      const table = tabulate(basis, truth);
      const drawn = Array.from({ length: 10 }, (_, i) => drawColumn(truth, 9 * i, 2000 + 9 * i));
      normal.add(lines, table, background, drawn, hold);
      return normal;
    });
    expect(free.chi2).toBe(held.chi2);
    expect(free.freedom).toBe(held.freedom);
  });
});

function worstWeight(c: Float64Array, truth: Float64Array): number {
  let worst = 0;
  for (const x of [3, 41, 86]) {
    const [own, wanted] = [c, truth].map((one) => wholeProfiles(lines, tabulate(basis, one), x).weights);
    worst = Math.max(worst, ...own.map((weight, i) => Math.abs(weight - wanted[i])));
  }
  return worst;
}
