import { describe, expect, it } from "vitest";
import { MaskBit } from "../src/reference/bits.js";
import { type RawEstimate, solveCrosstalk, withoutCrosstalk } from "../src/reference/crosstalk.js";
import type { ExtractionInput } from "../src/reference/extract.js";
import { type ColumnsSetup, columnsInput, windowedWeights } from "./columns.js";
import { judgeMissing, python } from "./judges.js";
import { runBoth } from "./runs.js";
import { seeded } from "./scene.js";

/** Widths and noise change from fibre to fibre, so that C is far from symmetric. */
const uneven: ColumnsSetup = {
  nx: 6,
  ny: 60,
  centres: [10.2, 13.1, 16.9, 19.6, 23.8, 26.7],
  sigmas: [0.8, 1.6, 0.9, 1.4, 0.7, 1.5],
  slope: 0.15,
  flux: (k, x) => 30 * 9 ** ((k * 2) % 5) + 7 * x,
  variance: (y, x) => 10 + 40 * Math.sin(y * 1.3) ** 2 + x,
  extra: (y, x) => 4 * Math.sin(2.1 * y * y + x),
};

const scipyScript = `
import json, sys
import numpy as np
from scipy.linalg import solve
out = []
for q in json.loads(sys.argv[1]):
    c, v = np.array(q["crosstalk"]), np.array(q["covariance"])
    inverse = np.linalg.inv(c)
    out.append({"flux": solve(c, q["raw"]).tolist(), "covariance": (inverse @ v @ inverse.T).tolist()})
print(json.dumps(out))
`;

interface Judged {
  flux: number[];
  covariance: number[][];
}

/** C, V and W d, dense, of the boxcar in each column. */
function denseBoxcar(input: ExtractionInput) {
  const { nx, ny, nFibre, halfAperture } = input;
  return Array.from({ length: nx }, (_, x) => {
    const rows = Array.from({ length: ny }, (_, y) => y);
    const profiles = Array.from({ length: nFibre }, (_, k) => windowedWeights(input, k, x));
    const apertures = Array.from({ length: nFibre }, (_, k) => {
      const centre = uneven.centres[k] + uneven.slope! * x;
      return rows.map((y) => {
        const upper = Math.min(y + 0.5, centre + halfAperture);
        return input.mask[y * nx + x] ? 0 : Math.max(0, upper - Math.max(y - 0.5, centre - halfAperture));
      });
    });
    const dot = (f: (y: number) => number) => rows.reduce((sum, y) => sum + f(y), 0);
    return {
      raw: apertures.map((own) => dot((y) => own[y] * input.electrons[y * nx + x])),
      crosstalk: apertures.map((own) => profiles.map((p) => dot((y) => own[y] * p[y]))),
      covariance: apertures.map((own) =>
        apertures.map((other) => dot((y) => own[y] * other[y] * input.noise.fixedVarianceImage![y * nx + x])),
      ),
    };
  });
}

describe("cross-talk correction", () => {
  it.skipIf(judgeMissing("scipy"))("of the boxcar is C⁻¹ f and C⁻¹VC⁻ᵀ, as scipy and numpy have them densely", () => {
    const input = columnsInput(uneven, { method: "boxcar", crosstalk: true, halfAperture: 2.1, bandwidth: 5 });
    input.mask[16 * input.nx + 2] = MaskBit.bad;
    const dense = denseBoxcar(input);
    // Strongly non-symmetric: a broad fibre spills far more on its narrow neighbour than it gets back.
    expect(dense[0].crosstalk[2][1] / dense[0].crosstalk[1][2]).toBeGreaterThan(2);
    const judged: Judged[] = JSON.parse(python(scipyScript, [JSON.stringify(dense)]));
    for (const [name, { flux, variance, neighbourCovariance }] of runBoth(input)) {
      judged.forEach((expected, x) => {
        for (let k = 0; k < input.nFibre; k++) {
          const at = k * input.nx + x;
          const own = expected.covariance[k][k];
          const error = Math.abs(flux[at] - expected.flux[k]);
          expect(error / (Math.abs(expected.flux[k]) + Math.sqrt(own)), name).toBeLessThan(1e-11);
          expect(Math.abs(variance[at] / own - 1), name).toBeLessThan(1e-11);
          if (k + 1 === input.nFibre) continue;
          expect(Math.abs(neighbourCovariance[at] - expected.covariance[k][k + 1]) / own, name).toBeLessThan(1e-11);
        }
      });
    }
  });

  it.skipIf(judgeMissing("scipy"))("of the reference takes any C, even one with negative and growing entries", () => {
    const [n, b, next] = [11, 2, seeded(5)];
    const full = 2 * b + 1;
    const estimate: RawEstimate = {
      raw: Float64Array.from({ length: n }, () => 100 * next()),
      crosstalk: new Float64Array(n * full),
      covariance: new Float64Array(n * (b + 1)),
    };
    const zeros = () => Array.from({ length: n }, () => new Array<number>(n).fill(0));
    const [crosstalk, covariance] = [zeros(), zeros()];
    for (let k = 0; k < n; k++) {
      for (let m = Math.max(k - b, 0); m <= Math.min(k + b, n - 1); m++) {
        crosstalk[k][m] = m === k ? 1 + next() : (m > k ? 0.3 : -0.1) * next();
        estimate.crosstalk[k * full + m - k + b] = crosstalk[k][m];
        if (m > k) continue;
        covariance[k][m] = covariance[m][k] = m === k ? 4 + next() : next() - 0.5;
        estimate.covariance[k * (b + 1) + k - m] = covariance[k][m];
      }
    }
    const [judged]: Judged[] = JSON.parse(
      python(scipyScript, [JSON.stringify([{ raw: [...estimate.raw], crosstalk, covariance }])]),
    );
    const found = solveCrosstalk(estimate, n, b);
    for (let k = 0; k < n; k++) {
      expect(Math.abs(found.flux[k] - judged.flux[k])).toBeLessThan(1e-12 * 100);
      expect(Math.abs(found.variance[k] - judged.covariance[k][k])).toBeLessThan(1e-12 * 10);
      if (k > 0) expect(Math.abs(found.covarianceBelow[k] - judged.covariance[k][k - 1])).toBeLessThan(1e-12 * 10);
    }
    const alone = withoutCrosstalk(estimate, n, b);
    for (let k = 0; k < n; k++) {
      expect(Math.abs(alone.flux[k] - estimate.raw[k] / crosstalk[k][k])).toBeLessThan(1e-12);
      expect(Math.abs(alone.variance[k] - covariance[k][k] / crosstalk[k][k] ** 2)).toBeLessThan(1e-14);
    }
  });

  it("makes optimal extraction into joint, errors and covariances too", () => {
    const change = { bandwidth: 5 };
    const joint = runBoth(columnsInput(uneven, change));
    const optimal = runBoth(columnsInput(uneven, { ...change, method: "optimal", crosstalk: true }));
    const alone = runBoth(columnsInput(uneven, { ...change, method: "optimal", crosstalk: false }));
    joint.forEach(([name, expected], i) => {
      const found = optimal[i][1];
      let largestShift = 0;
      for (let j = 0; j < expected.flux.length; j++) {
        const sigma = Math.sqrt(expected.variance[j]);
        expect(Math.abs(found.flux[j] - expected.flux[j]) / (Math.abs(expected.flux[j]) + sigma), name).toBeLessThan(
          1e-11,
        );
        expect(Math.abs(found.variance[j] / expected.variance[j] - 1), name).toBeLessThan(1e-11);
        if (j + 6 < expected.flux.length) {
          expect(Math.abs(found.neighbourCovariance[j] - expected.neighbourCovariance[j]) / sigma ** 2).toBeLessThan(
            1e-11,
          );
        }
        largestShift = Math.max(largestShift, Math.abs(alone[i][1].flux[j] - expected.flux[j]) / sigma);
      }
      expect(largestShift, name).toBeGreaterThan(10); // there was cross-talk to take back
    });
  });

  it("leaves the others sane when no pixel of an aperture is good but the fibre's wings reach its neighbours", () => {
    const input = columnsInput(
      { ...uneven, centres: [10.2, 15.1, 20.3, 25.2, 30.4, 35.3], sigmas: [1, 1.1, 1.2, 1, 1.1, 1.2], extra: () => 0 },
      { method: "boxcar", crosstalk: true, halfAperture: 2.4, bandwidth: 5 },
    );
    for (let y = 17; y <= 24; y++) input.mask[y * input.nx + 3] = MaskBit.bad; // all of fibre 2's aperture
    for (const [name, { flux, variance }] of runBoth(input)) {
      expect(flux[2 * input.nx + 3], name).toBeNaN();
      for (const k of [0, 1, 4, 5]) {
        const at = k * input.nx + 3;
        // What fibre 2 leaks to the next apertures cannot be told without it: below 1 % of its light.
        expect(Math.abs(flux[at] - uneven.flux(k, 3)), `${name}, fibre ${k}`).toBeLessThan(0.02 * uneven.flux(2, 3));
        expect(variance[at] / variance[at - 1], `${name}, fibre ${k}`).toBeLessThan(1.5);
        expect(variance[at] / variance[at - 1], `${name}, fibre ${k}`).toBeGreaterThan(0.6);
      }
    }
  });
});
