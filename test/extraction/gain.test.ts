import { describe, expect, it } from "vitest";
import { extractFrame } from "../../src/extraction/extract.js";
import { cases, expectedColumns, loneGain } from "../../src/extraction/gain.js";
import { modelColumns } from "../../src/extraction/modelColumn.js";
import type { Column } from "../../src/reference/column.js";
import { frameScene } from "./frames.js";

const bare = { cosmicRays: false, background: false, shift: false, refine: false } as const;

describe("what weighting gains for a fibre alone", () => {
  it("is 1/0.94345 in S/N against the best boxcar, ± 1.400 σ, where background rules, 1/erf(1.4/√2) of the light where photons do", async () => {
    // Maximum of erf(x/√2)/√(2x)·(4π)^¼ (closed form); erf(1.4/√2) = 0.838487 from scipy. An aperture of ± 5.5 px about whole
    // pixels ends on pixels' edges; pixels widen the Gaussian to √(σ² + 1/12), 0.27 %.
    const sigma = 5.5 / 1.4;
    const { frame, tramlines } = frameScene({ nx: 40, ny: 260, nFibre: 3, pitch: 80, bow: 0, sigma });
    for (let k = 0; k < 3; k++) {
      tramlines.legendre.set([45 + 80 * k, 0, 0, 0], 4 * k);
      tramlines.profile.sigma.set([sigma, 0], 2 * k);
    }
    const { fit } = await extractFrame(frame, tramlines, { ...bare, method: "boxcar", halfAperture: 5.5 });
    const gain = loneGain(fit);
    expect(Math.abs(gain.noiseEquivalentWidth / (3.5449 * sigma) - 1.0027)).toBeLessThan(2e-4);
    expect(Math.abs(Math.sqrt(gain.backgroundLimited) * 0.94345 - 1)).toBeLessThan(2e-3);
    expect(Math.abs(gain.photonLimited * 0.838487 - 1)).toBeLessThan(1e-5);
    expect(Math.abs(gain.caughtShare / 0.838487 - 1)).toBeLessThan(1e-5);
  });
});

describe("expected variances of one crowded column", () => {
  it("are those of dense weights on the pixels, and so are the variances of differences from joint", async () => {
    const { frame, tramlines } = frameScene({ nx: 16, ny: 60, nFibre: 9, pitch: 3.7, sigma: 1.3 });
    const half = 1.7;
    const { fit } = await extractFrame(frame, tramlines, { ...bare, halfAperture: half });
    const expected = expectedColumns(fit)[11];
    const column = modelColumns(fit)(expected.x);
    const weights = denseWeights(column, half);
    const noise = (w: number[][], v: number[][], k: number) =>
      w[k].reduce((sum, value, row) => sum + value * v[k][row] * varianceAt(column, row), 0);
    cases.forEach(([method, corrected], i) => {
      const own = weights[`${method} ${corrected}`];
      const off = own.map((rows, k) => rows.map((value, row) => value - weights["joint true"][k][row]));
      for (let k = 0; k < 9; k++) {
        const name = `${method} ${corrected}, fibre ${k}`;
        expect(Math.abs(expected.variance[i][k] / noise(own, own, k) - 1), name).toBeLessThan(1e-9);
        const scale = expected.variance[0][k];
        expect(Math.abs(expected.differenceVariance[i][k] - noise(off, off, k)) / scale, name).toBeLessThan(1e-9);
      }
    });
    // The corrected boxcar is really another estimate here, or the differences would say nothing.
    expect(expected.differenceVariance[3][4]).toBeGreaterThan(0.05 * expected.variance[0][4]);
  });
});

function varianceAt(column: Column, row: number): number {
  return column.inverseVariance[row] > 0 ? 1 / column.inverseVariance[row] : 0;
}

/** Each method's weights on the rows, from dense matrices: G with f = G d. */
function denseWeights(column: Column, half: number): Record<string, number[][]> {
  const { nFibre, nRow, nWindow, start, margin, centre } = column;
  const zeros = () => Array.from({ length: nFibre }, () => new Array<number>(nRow).fill(0));
  const [profile, aperture, weighted] = [zeros(), zeros(), zeros()];
  for (let k = 0; k < nFibre; k++) {
    for (let i = 0; i < nWindow; i++) {
      const row = margin + start[k] + i;
      if (column.inverseVariance[row] === 0) continue;
      profile[k][row] = column.weights[k * nWindow + i];
      weighted[k][row] = profile[k][row] * column.inverseVariance[row];
      const inside = Math.min(i + 0.5, centre[k] + half) - Math.max(i - 0.5, centre[k] - half);
      aperture[k][row] = Math.max(0, inside);
    }
  }
  const seen = (w: number[][]) =>
    w.map((rows) => profile.map((p) => rows.reduce((s, value, row) => s + value * p[row], 0)));
  const corrected = (w: number[][]) => times(inverse(seen(w)), w);
  const alone = (w: number[][]) => w.map((rows, k) => rows.map((value) => value / seen(w)[k][k]));
  return {
    "joint true": corrected(weighted),
    "optimal true": corrected(weighted),
    "optimal false": alone(weighted),
    "boxcar true": corrected(aperture),
    "boxcar false": alone(aperture),
  };
}

function times(a: number[][], b: number[][]): number[][] {
  return a.map((row) => b[0].map((_, c) => row.reduce((sum, value, m) => sum + value * b[m][c], 0)));
}

/** Gauss–Jordan; the matrices here are diagonally dominant. */
function inverse(a: number[][]): number[][] {
  const n = a.length;
  const m = a.map((row, i) => [...row, ...row.map((_, j) => (i === j ? 1 : 0))]);
  for (let i = 0; i < n; i++) {
    const pivot = m[i][i];
    m[i] = m[i].map((value) => value / pivot);
    for (let r = 0; r < n; r++) {
      const share = m[r][i];
      if (r !== i) m[r] = m[r].map((value, c) => value - share * m[i][c]);
    }
  }
  return m.map((row) => row.slice(n));
}
