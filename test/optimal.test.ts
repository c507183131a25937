import { describe, expect, it } from "vitest";
import { MaskBit } from "../src/reference/bits.js";
import { type ColumnsSetup, columnsInput, windowedWeights } from "./columns.js";
import { runBoth } from "./runs.js";

const lonely: ColumnsSetup = {
  ny: 120,
  centres: [17.3, 60.8, 101.45],
  sigmas: [1.1, 1.4, 0.95],
  slope: 0.3,
  flux: (k, x) => 1000 * (k + 1) + 37 * x,
  variance: (y, x) => 20 + 0.3 * y + 2 * x,
  extra: (y, x) => 6 * Math.sin(1.7 * y * y + x), // stands for noise: every pixel its own
};

describe("optimal extraction", () => {
  it("has a noise-equivalent width of 2√π·σ = 3.5449 σ where background rules (closed form: 1/∫P²)", () => {
    // A broad profile, so that the sum over pixels is the integral.
    const [sigma, level] = [3.2, 49];
    const input = columnsInput(
      { ny: 90, centres: [44.7], sigmas: [sigma], flux: () => 800, variance: () => level },
      { method: "optimal", halfWindow: 30 },
    );
    for (const [name, { variance }] of runBoth(input)) {
      // Integration over the pixel broadens σ² by 1/12 to first order.
      const width = variance[2] / level / Math.sqrt(sigma * sigma + 1 / 12);
      expect(Math.abs(width - 3.5449), name).toBeLessThan(1e-3);
    }
  });

  it("is Σ P d/v ÷ Σ P²/v with variance 1 ÷ Σ P²/v, masked pixels left out (Horne 1986, eq. 8)", () => {
    const input = columnsInput(lonely, { method: "optimal" });
    const { nx, ny, electrons, mask } = input;
    for (const [y, x] of [
      [16, 1],
      [19, 1],
      [61, 2],
      [99, 3],
      [104, 3],
    ])
      mask[y * nx + x] = MaskBit.bad;
    for (const [name, { flux, variance }] of runBoth(input)) {
      for (let k = 0; k < 3; k++) {
        for (let x = 0; x < nx; x++) {
          const weights = windowedWeights(input, k, x);
          let [top, bottom] = [0, 0];
          for (let y = 0; y < ny; y++) {
            const at = y * nx + x;
            if (mask[at] !== 0) continue;
            const v = input.noise.fixedVarianceImage![at];
            top += (weights[y] * electrons[at]) / v;
            bottom += weights[y] ** 2 / v;
          }
          expect(Math.abs(flux[k * nx + x] * bottom - top) / top, name).toBeLessThan(1e-12);
          expect(Math.abs(variance[k * nx + x] * bottom - 1), name).toBeLessThan(1e-12);
        }
      }
    }
  });

  it("loses nothing but information under a mask: without noise the flux stands", () => {
    const input = columnsInput({ ...lonely, extra: () => 0 }, { method: "optimal" });
    const whole = runBoth(input).map(([, result]) => result);
    for (const [y, x] of [
      [17, 1],
      [61, 2],
    ])
      input.mask[y * input.nx + x] = MaskBit.bad;
    runBoth(input).forEach(([name, { flux, variance }], i) => {
      for (const [k, x] of [
        [0, 1],
        [1, 2],
      ]) {
        const at = k * input.nx + x;
        expect(Math.abs(flux[at] / lonely.flux(k, x) - 1), name).toBeLessThan(1e-6);
        expect(variance[at] / whole[i].variance[at], name).toBeGreaterThan(1.2);
      }
    });
  });

  it("is joint extraction where fibres stand far apart, and differs from it where they touch", () => {
    for (const [pitch, alike] of [
      [40, true],
      [3, false],
    ] as const) {
      const setup = { ...lonely, centres: [17.3, 17.3 + pitch, 17.4 + 2 * pitch] };
      const [optimal, joint] = (["optimal", "joint"] as const).map((method) =>
        runBoth(columnsInput(setup, { method })),
      );
      optimal.forEach(([name, { flux, variance }], i) => {
        const other = joint[i][1];
        for (let j = 0; j < flux.length; j++) {
          const [df, dv] = [Math.abs(flux[j] / other.flux[j] - 1), variance[j] / other.variance[j]];
          if (alike) expect(df, name).toBeLessThan(1e-13);
          else expect(df, name).toBeGreaterThan(1e-3);
          if (alike) expect(Math.abs(dv - 1), name).toBeLessThan(1e-13);
          else expect(dv, name).toBeLessThan(0.995); // joint pays for telling neighbours apart
        }
      });
    }
  });

  it("carries the neighbours' covariance that overlapping weights make: V = W N Wᵀ", () => {
    const setup = { ...lonely, centres: [17.3, 21.4, 25.2] };
    const input = columnsInput(setup, { method: "optimal" });
    for (const [name, { variance, neighbourCovariance }] of runBoth(input)) {
      for (let k = 0; k < 2; k++) {
        for (let x = 0; x < input.nx; x++) {
          const [own, next] = [windowedWeights(input, k, x), windowedWeights(input, k + 1, x)];
          const shared = own.reduce(
            (sum, p, y) => sum + (p * next[y]) / input.noise.fixedVarianceImage![y * input.nx + x],
            0,
          );
          const at = k * input.nx + x;
          const expected = shared * variance[at] * variance[at + input.nx];
          expect(Math.abs(neighbourCovariance[at] / expected - 1), name).toBeLessThan(1e-11);
        }
      }
      for (let x = 0; x < input.nx; x++) expect(neighbourCovariance[2 * input.nx + x], name).toBeNaN();
    }
  });
});
