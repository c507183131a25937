/** The kernel that fits sampled columns against its twins in plain TypeScript, f32 against f64. */
import { beforeAll, describe, expect, it } from "vitest";
import { ColumnSample, groupColumns, mostY, type SampledFrame } from "../src/kernels/columnFit.js";
import { type Kernels, loadKernels } from "../src/kernels/module.js";
import { backgroundNormal } from "../src/reference/backgroundNormal.js";
import { fitColumn } from "../src/reference/columnFit.js";
import { legendreArgument, legendreBasis } from "../src/reference/legendre.js";
import { emptyColumn, solveLocal } from "../src/reference/shapeColumn.js";
import { columnModel, columnProfiles, type Lines } from "../src/reference/shapeProfiles.js";
import { profileTable } from "../src/tramlines/profileTable.js";
import type { GaussianProfile } from "../src/tramlines/tramlines.js";
import { normalDeviate, seeded } from "./scene.js";

const [nx, ny, nFibre] = [70, 83, 14];
const firstColumns = Int32Array.of(0, 11, 37, 68); // of the last, two columns lie beyond the frame
const profile: GaussianProfile = { kind: "gaussian", sigma: new Float64Array(0), widthDegree: 1, relativeError: 0 };
const halfWindow = 6;
const background = { nX: 2, nY: 3, coefficients: Float64Array.of(9, -3, 1.5, 2, 0.7, -0.4) };

/** Bowed and tilted lines whose widths differ, the first and the last of them half off the frame. */
const lines: Lines = {
  ...{ nx, ny, nFibre, nTrace: 3, nWidth: 2 },
  trace: Float64Array.from({ length: 3 * nFibre }, (_, i) => [6.3 * Math.floor(i / 3) + 0.2, 0.9, 0.5][i % 3]),
  width: Float64Array.from({ length: 2 * nFibre }, (_, i) => (i % 2 ? 0.002 : 1 + 0.02 * Math.sin(i))),
};
const flux = (k: number, x: number) => [9000, 40, 700, 3, 60_000][k % 5] * (1 + 0.3 * Math.sin(x + k));
const moved = 0.06;

let kernels: Kernels;
let frame: SampledFrame;
beforeAll(async () => {
  kernels = await loadKernels();
  frame = frameOf(profileTable(kernels, profile));
});

/** Light 0.06 px above the lines, on the background, with noise, pixels without a value, and a response of its own. */
function frameOf(table: ReturnType<typeof profileTable>): SampledFrame {
  const next = seeded(31);
  const electrons = new Float32Array(nx * ny);
  const mask = new Uint8Array(nx * ny);
  const inverseResponse = Float32Array.from({ length: nx * ny }, () => 0.9 + 0.2 * next());
  const up = { ...lines, trace: lines.trace.map((c, i) => (i % 3 === 0 ? c + moved : c)) };
  for (let x = 0; x < nx; x++) {
    const profiles = columnProfiles(up, table, x, halfWindow);
    const model = columnModel(
      profiles,
      Float64Array.from({ length: nFibre }, (_, k) => flux(k, x)),
    );
    for (let y = 0; y < ny; y++) {
      const at = y * nx + x;
      const light = model[y] + under(x, y);
      electrons[at] = light + Math.sqrt(light * inverseResponse[at] + variance(x, y)) * normalDeviate(next);
      if (next() < 0.02) mask[at] = 1;
      else if (next() < 0.01) electrons[at] = Number.NaN;
    }
  }
  const bandOfRow = Uint8Array.from({ length: ny }, (_, y) => (y < 40 ? 0 : 1));
  const fixedVariance = Float32Array.from({ length: 2 * nx }, (_, i) => variance(i % nx, i < nx ? 0 : 40));
  return { nx, ny, electrons, mask, noise: { bandOfRow, fixedVariance, inverseResponse } };
}

function variance(x: number, y: number): number {
  return (y < 40 ? 9 : 13) + 0.01 * x;
}

function under(x: number, y: number): number {
  const inX = legendreBasis(legendreArgument(x, nx), 2);
  const inY = legendreBasis(legendreArgument(y, ny), 3);
  return background.coefficients.reduce((sum, c, i) => sum + c * inX[Math.floor(i / 3)] * inY[i % 3], 0);
}

/** The twin's fit of column x. */
function expected(x: number, of = frame, profileError = 0.003, clip = 0) {
  const data = emptyColumn(x, ny);
  const smooth = Float64Array.from({ length: ny }, (_, y) => under(x, y));
  for (let y = 0; y < ny; y++) {
    const at = y * nx + x;
    data.good[y] = of.mask[at] === 0 && Number.isFinite(of.electrons[at]) ? 1 : 0;
    data.light[y] = data.good[y] ? of.electrons[at] : 0;
    data.fixedVariance[y] = variance(x, y);
    data.variancePerElectron[y] = of.noise.inverseResponse![at];
  }
  const profiles = columnProfiles(lines, profileTable(kernels, profile), x, halfWindow);
  const level = data.light.map((light, y) => (data.good[y] ? light - smooth[y] : 0));
  const { flux, residual } = fitColumn(profiles, data, level, smooth, profileError, clip);
  const polynomials = Array.from({ length: mostY }, (_, j) =>
    Float64Array.from({ length: ny }, (_, y) => legendreBasis(legendreArgument(y, ny), mostY)[j]),
  );
  const normal = backgroundNormal(profiles, residual, data.inverseVariance, polynomials);
  return { flux, residual, normal, local: solveLocal(profiles, flux, residual, data.inverseVariance, 2) };
}

function sampled(fibres = lines, of = frame) {
  return new ColumnSample(kernels, of, firstColumns, fibres, profileTable(kernels, profile), halfWindow);
}

/** Columns of every group, with the index of fibre 0 in them. */
const places = Array.from(firstColumns).flatMap((x0, g) =>
  Array.from({ length: groupColumns }, (_, c) => ({ x: x0 + c, g, c })).filter(({ x }) => x < nx),
);

describe("fit of sampled columns", () => {
  it("finds fluxes, shifts and their variances as the twin does, to a fiftieth of their errors", () => {
    const tells = new Uint8Array(nFibre).fill(1);
    const found = sampled().fit(lines, { background, tells, profileError: 0.003 });
    let [n, sum] = [0, 0];
    for (const { x, g, c } of places) {
      const { flux, local } = expected(x);
      for (let k = 0; k < nFibre; k++) {
        const at = (g * nFibre + k) * groupColumns + c;
        const [fluxError, shiftError] = [Math.sqrt(local.variance[2 * k]), Math.sqrt(local.variance[2 * k + 1])];
        expect(Math.abs(found.flux[at] - flux[k])).toBeLessThan(0.02 * fluxError);
        expect(Math.abs(Math.sqrt(found.fluxVariance[at]) / fluxError - 1)).toBeLessThan(0.02);
        if (flux[k] < 300) continue;
        expect(Math.abs(found.shift[at] - local.value[2 * k + 1])).toBeLessThan(0.02 * shiftError);
        expect(Math.abs(Math.sqrt(found.shiftVariance[at]) / shiftError - 1)).toBeLessThan(0.01);
        if (k > 0 && k < nFibre - 1 && flux[k] > 20_000) [n, sum] = [n + 1, sum + found.shift[at]];
      }
    }
    expect(Math.abs(sum / n - moved)).toBeLessThan(0.005); // and it is what the light was moved by
  });

  it.each([
    [0.003, 0],
    [0.05, 3],
  ])(
    "leaves what the twin leaves, and the same equations of the background, with misfits of %f, clipped at %i σ",
    (profileError, clip) => {
      const hit = { ...frame, electrons: frame.electrons.slice() };
      // In the valley between fibres of 700 and 3 e⁻, in every column: its neighbours go out with it.
      for (let x = 0; clip > 0 && x < nx; x++) hit.electrons[16 * nx + x] += 2000;
      const sample = sampled(lines, hit);
      const { normal } = sample.fit(lines, { background, profileError, clip, normal: true, residual: true });
      for (const { x, g, c } of places) {
        const twin = expected(x, hit, profileError, clip);
        const nNumber = twin.normal.length;
        expect(nNumber).toBe((mostY * (mostY + 3)) / 2);
        for (let y = 0; y < ny; y++) {
          const light = frame.electrons[y * nx + x];
          if (frame.mask[y * nx + x] !== 0 || Number.isNaN(light)) continue;
          const near = [-3, -2, -1, 0, 1, 2, 3].map((d) => hit.electrons[(y + d) * nx + x] || 0);
          const sigma = Math.sqrt(9 + Math.max(...near));
          expect(Math.abs(sample.residual[(g * ny + y) * groupColumns + c] - twin.residual[y])).toBeLessThan(
            0.02 * sigma,
          );
        }
        const scale = twin.normal[0];
        twin.normal.forEach((value, i) => {
          const own = normal[(g * nNumber + i) * groupColumns + c];
          // Right-hand sides are sums of noise: of the order of the root of the matrix's diagonal.
          const unit = i < nNumber - mostY ? scale : Math.sqrt(scale);
          expect(Math.abs(own - value)).toBeLessThan(0.01 * unit);
        });
      }
    },
  );

  it("gives a fibre no shift whose light may not tell, and groups that were not asked for nothing", () => {
    const sample = sampled();
    const tells = Uint8Array.from({ length: nFibre }, (_, k) => (k === 4 ? 0 : 1));
    const { shift, shiftVariance } = sample.fit(lines, { background, tells, groups: Int32Array.of(2) });
    const at = (g: number, k: number) => (g * nFibre + k) * groupColumns;
    expect(shift[at(2, 4)]).toBe(0);
    expect(shiftVariance[at(2, 4)]).toBe(0);
    expect(shiftVariance[at(2, 9)]).toBeGreaterThan(0);
    expect(shiftVariance[at(1, 9)]).toBe(0);
  });

  it("leaves out pixels that the fit misses by too much, when asked to", () => {
    const hit = { ...frame, electrons: frame.electrons.slice() };
    // Between fibres 7 and 8, of 700 and 3 e⁻, in one column of the group at 37.
    const y = 6.3 * 7 + 0.2 + 3;
    hit.electrons[Math.round(y) * nx + 38] += 3000;
    const table = profileTable(kernels, profile);
    const level = (of: SampledFrame, clip: number) => {
      const { normal } = new ColumnSample(kernels, of, firstColumns, lines, table, halfWindow).fit(lines, {
        ...{ background, clip, normal: true, profileError: 0.02 },
      });
      const nMatrix = (mostY * (mostY + 1)) / 2;
      return normal[(2 * (nMatrix + mostY) + nMatrix) * groupColumns + 1]; // the level's right-hand side in column 38
    };
    const clean = level(frame, 5);
    expect(Math.abs(level(hit, 5) - clean)).toBeLessThan(5);
    expect(Math.abs(level(hit, 0) - clean)).toBeGreaterThan(20);
  });

  it("refuses more fibres than it was laid out for", () => {
    const few = { ...lines, nFibre: 3, trace: lines.trace.slice(0, 9), width: lines.width.slice(0, 6) };
    expect(() => sampled(few).fit(lines)).toThrow("14 fibres to fit, but there is room for 3 of the same series.");
  });
});
