/** When single precision serves; what it costs is measured in ../precision.test.ts. */
import { describe, expect, it } from "vitest";
import { extractFrame } from "../../src/extraction/extract.js";
import { choosePrecision, needsDouble } from "../../src/extraction/precision.js";
import { frameScene } from "./frames.js";

const plan = (smallestPitch: number, fwhm: number) => ({
  ...{ active: [0], halfWindow: 6, wing: 0, bandwidth: 2, blockColumns: 16 as const, smallestPitch },
  widestSigma: fwhm / (2 * Math.sqrt(2 * Math.log(2))),
});

describe("precision", () => {
  it("is single down to three quarters of a width between fibres, double below, and what was asked for otherwise", () => {
    expect(choosePrecision("auto", plan(5, 2.4))).toBe("f32");
    expect(choosePrecision("auto", plan(1.81, 2.4))).toBe("f32");
    expect(choosePrecision("auto", plan(1.79, 2.4))).toBe("f64");
    expect(choosePrecision("auto", plan(5, 6.7))).toBe("f64");
    expect(choosePrecision("f64", plan(5, 2.4))).toBe("f64");
    expect(choosePrecision("f32", plan(1, 2.4))).toBe("f32");
  });

  it("is double for fluxes that single precision does not hold well enough", () => {
    expect(needsDouble(Float32Array.of(Number.NaN, 2.9e6, -1e9))).toBe(false);
    expect(needsDouble(Float32Array.of(Number.NaN, 3.1e6))).toBe(true);
  });

  it("turns to double by itself when a frame is brighter than it looked", async () => {
    const options = { precision: "auto", shift: false } as const;
    const { frame, tramlines } = frameScene({ nx: 64, ny: 80, nFibre: 8 });
    const calm = await extractFrame(frame, tramlines, options);
    expect(calm.precision).toBe("f32");
    expect(calm.spectra.flux).toBeInstanceOf(Float32Array);
    const bright = { ...frame, electrons: frame.electrons.map((value) => 1e4 * value) };
    const extraction = await extractFrame(bright, tramlines, options);
    expect(extraction.precision).toBe("f64");
    expect(extraction.spectra.flux).toBeInstanceOf(Float64Array);
  });
});
