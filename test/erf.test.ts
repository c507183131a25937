import { beforeAll, describe, expect, it } from "vitest";
import { erf as kernelErf } from "../src/kernels/erf.js";
import { type Kernels, loadKernels } from "../src/kernels/module.js";
import { erf, erfc } from "../src/reference/erf.js";

// Abramowitz & Stegun, Handbook of Mathematical Functions, table 7.1 (ten digits).
const handbook: [number, number][] = [
  [0.5, 0.5204998778],
  [1.0, 0.8427007929],
  [1.5, 0.9661051465],
  [2.0, 0.995322265],
];

// scipy.special.erfc.
const tails: [number, number][] = [
  [4, 1.54172579e-8],
  [6, 2.151973671e-17],
];

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

describe("error function", () => {
  it.each(handbook)("erf(%d) stands in the handbook", (x, value) => {
    for (const found of [erf(x), -erf(-x), kernelErf(kernels, x), -kernelErf(kernels, -x)]) {
      expect(Math.abs(found - value)).toBeLessThanOrEqual(0.5e-10);
    }
  });

  it.each(tails)("erfc(%d) keeps its relative accuracy in the tail", (x, value) => {
    expect(Math.abs(erfc(x) / value - 1)).toBeLessThan(5e-10);
  });

  it("is the same from the kernel's table and from the handbook's series, cell edges included", () => {
    const call = kernels.workbench(0).call;
    let worst = 0;
    for (let i = -27000; i <= 27000; i++) worst = Math.max(worst, Math.abs(call.erf(i / 4096) - erf(i / 4096)));
    expect(worst).toBeLessThan(1e-15);
    expect(call.erf(6)).toBe(1);
    expect(call.erf(-1e300)).toBe(-1);
    expect(call.erf(Number.NaN)).toBeNaN();
  });

  it("has the slope 2/√π · exp(−x²) everywhere (Abramowitz & Stegun 7.1.19)", () => {
    const call = kernels.workbench(0).call;
    for (let x = -5.9; x < 5.9; x += 0.0371) {
      const slope = (call.erf(x + 1e-4) - call.erf(x - 1e-4)) / 2e-4;
      expect(Math.abs(slope - (2 / Math.sqrt(Math.PI)) * Math.exp(-x * x))).toBeLessThan(2e-8);
    }
  });
});
