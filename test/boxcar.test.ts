import { describe, expect, it } from "vitest";
import { MaskBit } from "../src/reference/bits.js";
import { gaussianWeights } from "../src/reference/profile.js";
import { type ColumnsSetup, columnsInput } from "./columns.js";
import { runBoth } from "./runs.js";

const uneven: ColumnsSetup = {
  ny: 64,
  centres: [16.35, 46.8],
  sigmas: [1.2, 1.45],
  slope: 0.17,
  flux: (k, x) => 700 * (k + 1) + 50 * x,
  variance: (y, x) => 9 + 0.2 * y + x,
  extra: (y, x) => 5 * Math.cos(2.3 * y * y + 3 * x),
};

/** Share of pixel y inside [low, high]. */
function inside(y: number, low: number, high: number): number {
  return Math.max(0, Math.min(y + 0.5, high) - Math.max(y - 0.5, low));
}

describe("boxcar extraction", () => {
  it("does best with a half-width of 1.400 σ, where it reaches 0.94345 of the weighted S/N", () => {
    // Closed form: erf(x/√2)/√(2x) against 1/√(2√π), maximal at x = 1.400 (background-limited, profile continuous).
    const sigma = 20; // pixels small against the profile, and every aperture ends on the edge of a pixel
    const ratio = (half: number, method: "boxcar" | "optimal") => {
      const input = columnsInput(
        { nx: 1, ny: 221, centres: [110.5], sigmas: [sigma], flux: () => 1e4, variance: () => 50 },
        { method, halfAperture: half * sigma, halfWindow: 100, bandwidth: 0 },
      );
      return runBoth(input).map(([, { variance }]) => 1 / Math.sqrt(variance[0]));
    };
    const weighted = ratio(1, "optimal");
    const signal = (half: number) => ratio(half, "boxcar").map((s, i) => s / weighted[i]);
    for (const i of [0, 1]) {
      expect(Math.abs(signal(1.4)[i] - 0.94345)).toBeLessThan(2e-4);
      const widths = [1.25, 1.3, 1.35, 1.4, 1.45, 1.5, 1.55];
      const best = widths.reduce((a, b) => (signal(b)[i] > signal(a)[i] ? b : a));
      expect(best).toBe(1.4);
    }
  });

  it.each([1.37, 2.5, 4.081])("counts edge pixels by the fraction within ±%d px, on a slanted line", (half) => {
    const input = columnsInput(uneven, { method: "boxcar", halfAperture: half });
    const { nx, ny, electrons } = input;
    for (const [name, { flux, variance }] of runBoth(input)) {
      for (let k = 0; k < 2; k++) {
        for (let x = 0; x < nx; x++) {
          const centre = uneven.centres[k] + 0.17 * x;
          const weights = gaussianWeights(centre, uneven.sigmas[k], 0, ny);
          let [sum, caught, noise] = [0, 0, 0];
          for (let y = 0; y < ny; y++) {
            const share = inside(y, centre - half, centre + half);
            sum += share * electrons[y * nx + x];
            caught += share * weights[y];
            noise += share * share * input.noise.fixedVarianceImage![y * nx + x];
          }
          expect(Math.abs((flux[k * nx + x] * caught) / sum - 1), name).toBeLessThan(1e-11);
          expect(Math.abs((variance[k * nx + x] * caught * caught) / noise - 1), name).toBeLessThan(1e-11);
        }
      }
    }
  });

  it("leaves masked pixels out and makes good the share of light that they held", () => {
    const input = columnsInput({ ...uneven, extra: () => 0 }, { method: "boxcar", halfAperture: 2.6 });
    input.mask[17 * input.nx + 1] = MaskBit.bad;
    input.electrons[17 * input.nx + 1] = 1e6;
    input.mask[47 * input.nx + 3] = MaskBit.saturated;
    input.electrons[47 * input.nx + 3] = 65535;
    for (const [name, { flux }] of runBoth(input)) {
      for (let k = 0; k < 2; k++) {
        for (let x = 0; x < input.nx; x++) {
          expect(Math.abs(flux[k * input.nx + x] / uneven.flux(k, x) - 1), name).toBeLessThan(1e-6);
        }
      }
    }
  });

  it("takes the background off each pixel by its fraction", () => {
    const level = (y: number, x: number) => 30 + 4 * y - 2 * x;
    const input = columnsInput({ ...uneven, extra: level }, { method: "boxcar", halfAperture: 2.2 });
    const [middleY, middleX] = [(uneven.ny - 1) / 2, (input.nx - 1) / 2];
    // 30 + 4y − 2x as Legendre terms of both axes, x outer.
    const coefficients = Float64Array.of(30 + 4 * middleY - 2 * middleX, 4 * middleY, -2 * middleX, 0);
    for (const [name, { flux, background }] of runBoth({ ...input, background: { nX: 2, nY: 2, coefficients } })) {
      for (let k = 0; k < 2; k++) {
        for (let x = 0; x < input.nx; x++) {
          const at = k * input.nx + x;
          expect(Math.abs(flux[at] / uneven.flux(k, x) - 1), name).toBeLessThan(2e-6);
          const row = Math.round(uneven.centres[k] + 0.17 * (4 * Math.floor(x / 4) + 1.5)); // the window's middle
          expect(Math.abs(background[at] - level(row, x)), name).toBeLessThan(1e-9);
        }
      }
    }
  });
});
