import { describe, expect, it } from "vitest";
import type { ExtractionInput } from "../src/reference/extract.js";
import { type ColumnsSetup, columnsInput, windowedWeights } from "./columns.js";
import { judgeMissing, python } from "./judges.js";
import { type Result, runBoth } from "./runs.js";

const crowded: ColumnsSetup = {
  nx: 6,
  ny: 70,
  centres: [9.3, 12.1, 15.45, 18.2, 20.9, 36.6, 39.2],
  sigmas: [1.05, 0.98, 1.1, 1.17, 1.02, 0.95, 1.08],
  slope: 0.21,
  flux: (k, x) => 40 * 7 ** (k % 4) + 11 * x,
  variance: (y, x) => 12 + 0.5 * y + 3 * x,
  extra: (y, x) => 5 * Math.sin(1.9 * y * y + 2 * x),
};

function crowdedInput(change: Partial<ColumnsSetup> = {}): ExtractionInput {
  const input = columnsInput({ ...crowded, ...change });
  input.mask[14 * input.nx + 2] = 1;
  input.mask[38 * input.nx + 4] = 2;
  return input;
}

const scipyScript = `
import json, sys
import numpy as np
from scipy.linalg import lstsq
out = []
for q in json.loads(sys.argv[1]):
    a, d, v = (np.array(q[name], dtype=float) for name in ("profiles", "data", "variance"))
    a = a.T
    root = 1 / np.sqrt(v)
    flux = lstsq(a * root[:, None], d * root)[0]
    out.append({"flux": flux.tolist(), "covariance": np.linalg.inv(a.T @ (a / v[:, None])).tolist()})
print(json.dumps(out))
`;

interface Judged {
  flux: number[];
  covariance: number[][];
}

/** Dense weighted least squares over the good pixels of every column. */
function judge(input: ExtractionInput): Judged[] {
  const columns = Array.from({ length: input.nx }, (_, x) => {
    const rows = Array.from({ length: input.ny }, (_, y) => y).filter((y) => input.mask[y * input.nx + x] === 0);
    return {
      profiles: Array.from({ length: input.nFibre }, (_, k) => {
        const weights = windowedWeights(input, k, x);
        return rows.map((y) => weights[y]);
      }),
      data: rows.map((y) => input.electrons[y * input.nx + x] - input.background.coefficients[0]),
      variance: rows.map((y) => input.noise.fixedVarianceImage![y * input.nx + x]),
    };
  });
  return JSON.parse(python(scipyScript, [JSON.stringify(columns)]));
}

function expectAsJudged(name: string, result: Result, judged: Judged[], input: ExtractionInput, bound: number): void {
  judged.forEach(({ flux, covariance }, x) => {
    for (let k = 0; k < input.nFibre; k++) {
      const at = k * input.nx + x;
      const sigma = Math.sqrt(covariance[k][k]);
      expect(Math.abs(result.flux[at] - flux[k]) / (Math.abs(flux[k]) + sigma), `${name} flux`).toBeLessThan(bound);
      expect(Math.abs(result.variance[at] / covariance[k][k] - 1), `${name} variance`).toBeLessThan(bound);
      if (k + 1 === input.nFibre) continue;
      const error = Math.abs(result.neighbourCovariance[at] - covariance[k][k + 1]);
      expect(error / (sigma * Math.sqrt(covariance[k + 1][k + 1])), `${name} covariance`).toBeLessThan(bound);
    }
  });
}

describe("joint extraction", () => {
  it.skipIf(judgeMissing("scipy"))("is the dense weighted least squares of scipy.linalg.lstsq, errors and all", () => {
    const input = crowdedInput();
    const judged = judge(input);
    // The judge's covariances of neighbours are well away from 0 here: that they agree says something.
    expect(judged[0].covariance[3][4] / judged[0].covariance[3][3]).toBeLessThan(-0.1);
    for (const [name, result] of runBoth(input)) expectAsJudged(name, result, judged, input, 1e-11);
  });

  it.skipIf(judgeMissing("scipy"))("keeps that at fluxes of 1e±9 times as much, and on a background of 1e8 e⁻", () => {
    for (const scale of [1e-9, 1e9]) {
      const input = crowdedInput({
        flux: (k, x) => scale * crowded.flux(k, x),
        variance: (y, x) => scale * scale * crowded.variance(y, x),
        extra: (y, x) => scale * crowded.extra!(y, x),
      });
      const judged = judge(input);
      for (const [name, result] of runBoth(input)) expectAsJudged(name, result, judged, input, 1e-11);
    }
    const background = { nX: 1, nY: 1, coefficients: Float64Array.of(1e8) };
    const input = { ...crowdedInput({ extra: (y, x) => 1e8 + 5 * Math.sin(y * y + x) }), background };
    const judged = judge(input);
    for (const [name, result] of runBoth(input)) expectAsJudged(name, result, judged, input, 1e-11);
    // f32 pixels near 1e8 come in steps of 8 e⁻: 4.6 e⁻ of scatter over a few pixels is all that the offset may cost.
    for (let i = 0; i < judged.length; i++) {
      judged[i].flux.forEach((flux, k) => {
        expect(Math.abs(flux - crowded.flux(k, i))).toBeLessThan(40);
      });
    }
  });

  it("finds without noise what was put in", () => {
    for (const [name, { flux }] of runBoth(crowdedInput({ extra: () => 0 }))) {
      for (let i = 0; i < flux.length; i++) {
        const expected = crowded.flux(Math.floor(i / 6), i % 6);
        expect(Math.abs(flux[i] - expected), name).toBeLessThan(2e-6 * 40 * 7 ** 3);
      }
    }
  });

  it("gives each fibre the same light with the frame upside down", () => {
    const order = [6, 5, 4, 3, 2, 1, 0];
    const input = { ...crowdedInput(), bandwidth: 6 };
    const { nx, ny } = input;
    const flipped = <T extends Float32Array | Uint8Array>(image: T) =>
      image.map((_, i) => image[(ny - 1 - Math.floor(i / nx)) * nx + (i % nx)]) as T;
    const shuffled: ExtractionInput = {
      ...input,
      electrons: flipped(input.electrons),
      mask: flipped(input.mask),
      noise: { ...input.noise, fixedVarianceImage: flipped(input.noise.fixedVarianceImage!) },
      trace: Float64Array.from(order.flatMap((k) => [ny - 1 - input.trace[2 * k], -input.trace[2 * k + 1]])),
      width: Float64Array.from(order, (k) => input.width[k]),
    };
    const others = runBoth(shuffled);
    runBoth(input).forEach(([name, { flux, variance }], i) => {
      order.forEach((k, place) => {
        for (let x = 0; x < input.nx; x++) {
          const [at, there] = [k * input.nx + x, place * input.nx + x];
          expect(Math.abs(others[i][1].flux[there] - flux[at]) / Math.abs(flux[at]), name).toBeLessThan(1e-12);
          expect(Math.abs(others[i][1].variance[there] / variance[at] - 1), name).toBeLessThan(1e-12);
        }
      });
    });
  });

  it("gives a frame cut between groups of fibres what the whole gives", () => {
    const cut = 29; // from row 29 on, only the last two fibres reach
    const input = crowdedInput();
    const { nx, ny } = input;
    const image = <T extends Float32Array | Uint8Array>(whole: T, from: number, to: number) =>
      whole.slice(from * nx, to * nx) as T;
    const part = (from: number, to: number, fibres: number[]): ExtractionInput => ({
      ...input,
      ny: to - from,
      nFibre: fibres.length,
      bandwidth: Math.min(4, fibres.length - 1),
      trace: Float64Array.from(fibres.flatMap((k) => [input.trace[2 * k] - from, input.trace[2 * k + 1]])),
      width: Float64Array.from(fibres, (k) => input.width[k]),
      electrons: image(input.electrons, from, to),
      mask: image(input.mask, from, to),
      rejected: image(input.rejected, from, to),
      seen: input.seen.subarray(0, 2 * fibres.length),
      noise: {
        ...input.noise,
        bandOfRow: input.noise.bandOfRow.subarray(from, to),
        fixedVarianceImage: image(input.noise.fixedVarianceImage!, from, to),
        inverseResponse: image(input.noise.inverseResponse!, from, to),
      },
    });
    const parts = [part(0, cut, [0, 1, 2, 3, 4]), part(cut, ny, [5, 6])].map(runBoth);
    runBoth(input).forEach(([name, whole], i) => {
      for (let k = 0; k < 7; k++) {
        const [result, own] = k < 5 ? [parts[0][i][1], k] : [parts[1][i][1], k - 5];
        for (let x = 0; x < nx; x++) {
          const [at, there] = [k * nx + x, own * nx + x];
          // Windows of fibre 4 reach over the cut by the far wing; the solution notices in the ninth digit at most.
          expect(Math.abs(result.flux[there] / whole.flux[at] - 1), `${name} ${k}`).toBeLessThan(1e-8);
          expect(Math.abs(result.variance[there] / whole.variance[at] - 1), `${name} ${k}`).toBeLessThan(1e-8);
        }
      }
    });
  });

  it("does not let a fibre beyond the frame's edge, of which next to nothing is seen, cost its neighbour anything", () => {
    const edge = { ...crowded, ny: 45, centres: [9.3, 20.4, 40.6], sigmas: [1, 1, 1], slope: 0 };
    const alone = runBoth(columnsInput(edge));
    // At 48.2 px, 1.1e-4 of the fibre's light falls on the frame, under the wing of the fibre at 40.6 px.
    const beside = runBoth(columnsInput({ ...edge, centres: [...edge.centres, 48.2], sigmas: [1, 1, 1, 1] }));
    beside.forEach(([name, { flux, variance }], i) => {
      for (let x = 0; x < 6; x++) {
        const at = 2 * 6 + x;
        expect(Math.abs(variance[at] / alone[i][1].variance[at] - 1), name).toBeLessThan(1e-9);
        expect(flux[3 * 6 + x], name).toBeNaN();
      }
    });
  });
});
