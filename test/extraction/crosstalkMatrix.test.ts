/** Cross-talk from the profile model: against the error function, and against what the kernels make of a frame without noise. */
import { describe, expect, it } from "vitest";
import type { Frame } from "../../src/detector/frame.js";
import { measureCrosstalk } from "../../src/extraction/crosstalkMatrix.js";
import { extractFrame } from "../../src/extraction/extract.js";
import type { SimulatedExposure } from "../../src/simulate/exposure.js";
import { frameFromTruth, tramlinesFromTruth } from "./fromTruth.js";
import { bench, nFibre, readNoise } from "./twoBlocks.js";

/** The frame as it would be without noise. */
function quiet(exposure: SimulatedExposure): Frame {
  const electrons = Float32Array.from(exposure.truth.expectedElectrons());
  return { ...frameFromTruth(exposure, readNoise), electrons };
}

describe("cross-talk matrix", () => {
  it("is the Gaussian's integral over the aperture: FWHM 2.5 px, pitch and aperture 5 px (Abramowitz & Stegun 7.1)", async () => {
    const exposure = bench("science", { dead: [] }, true);
    const options = { method: "boxcar", halfAperture: 2.5, background: false } as const;
    const extraction = await extractFrame(quiet(exposure), tramlinesFromTruth(exposure), { ...options, shift: false });
    const { mean, reach, columns, values } = measureCrosstalk(extraction);
    const at = (k: number, m: number) => mean[k * (2 * reach + 1) + m - k + reach];
    // Half of the last printed digit of 98.147 % and 0.9266 %.
    for (const k of [0, 2, 5, 6, 12]) expect(Math.abs(at(k, k) - 0.98147)).toBeLessThan(5e-6);
    for (const [k, m] of [
      [0, 1],
      [3, 2],
      [11, 12],
    ])
      expect(Math.abs(at(k, m) - 0.009266)).toBeLessThan(5e-7);
    // 22 px and a block's gap away there is nothing left of a Gaussian of 1.06 px.
    expect(at(5, 6)).toBe(0);
    expect(columns).toEqual([32, 96, 160, 224, 288]);
    expect(values.length).toBe(nFibre * (2 * reach + 1) * 5);
    expect(at(0, -1)).toBeNaN();
  });

  it.each(["boxcar", "optimal"] as const)(
    "turns true fluxes into what the kernel's %s finds, uncorrected",
    async (method) => {
      const exposure = bench("science", { pitch: 4.1, dead: [4] });
      const extraction = await extractFrame(quiet(exposure), tramlinesFromTruth(exposure), {
        ...{ method, crosstalk: false, background: false, shift: false, cosmicRays: false },
      });
      const { truth } = exposure;
      const { values, reach, columns } = measureCrosstalk(extraction);
      const width = 2 * reach + 1;
      const share = (k: number, m: number, i: number) => values[(k * width + m - k + reach) * columns.length + i];
      let worst = 0;
      let largestLeak = 0;
      columns.forEach((x, i) => {
        for (let k = 0; k < nFibre; k++) {
          if (k === 3) continue;
          let raw = 0;
          for (let m = Math.max(0, k - reach); m <= Math.min(nFibre - 1, k + reach); m++) {
            if (m !== 3) raw += (share(k, m, i) || 0) * truth.flux[m * truth.nx + x];
          }
          const expected = raw / share(k, k, i);
          const own = truth.flux[k * truth.nx + x];
          largestLeak = Math.max(largestLeak, expected / own - 1);
          worst = Math.max(worst, Math.abs(extraction.spectra.flux[k * truth.nx + x] / expected - 1));
        }
      });
      expect(largestLeak).toBeGreaterThan(0.5);
      // Pixels are single precision (6e-8 each); optimal's variances settle to 0.1 σ only, which moves its small shares.
      expect(worst).toBeLessThan(method === "boxcar" ? 1e-5 : 3e-3);
    },
  );

  it("counts in slit positions, without a value where a fibre is dead", async () => {
    const exposure = bench("science", { dead: [4, 9] });
    const extraction = await extractFrame(quiet(exposure), tramlinesFromTruth(exposure), { background: false });
    const { estimator, mean, reach } = measureCrosstalk(extraction);
    const at = (k: number, m: number) => mean[(k - 1) * (2 * reach + 1) + m - k + reach];
    expect(estimator).toBe("boxcar"); // joint has no cross-talk of its own
    expect([at(4, 3), at(3, 4), at(4, 4), at(9, 8), at(10, 9)]).toEqual(Array(5).fill(Number.NaN));
    // Over the dead position, 10 px apart: far below the neighbour's share, and not that of the fibre beyond.
    expect(at(3, 5)).toBeLessThan(1e-6);
    expect(at(3, 2)).toBeGreaterThan(0.005);
    expect(at(2, 3)).not.toBe(at(3, 2));
  });
});
