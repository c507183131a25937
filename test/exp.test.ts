import { beforeAll, describe, expect, it } from "vitest";
import { exp as kernelExp } from "../src/kernels/exp.js";
import { type Kernels, loadKernels } from "../src/kernels/module.js";
import { exp } from "../src/reference/exp.js";
import { judgeMissing, python } from "./judges.js";

// Abramowitz & Stegun, Handbook of Mathematical Functions, table 4.4 (from memory; more digits there).
const handbook: [number, number][] = [
  [2, 7.389056099],
  [0.5, 1.648721271],
  [-1, 0.3678794412],
  [-2.5, 0.0820849986],
];

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

describe("exponential function", () => {
  it.each(handbook)("exp(%d) stands in the handbook", (x, value) => {
    for (const found of [exp(x), kernelExp(kernels, x)]) expect(Math.abs(found / value - 1)).toBeLessThan(1e-9);
  });

  it.skipIf(judgeMissing("scipy"))("agrees with numpy's to the last bit or two, over all that a profile needs", () => {
    const script = `
import json, numpy as np
x = np.arange(-45017, 2311) / 64.0
print(json.dumps([x.tolist(), [v.hex() for v in np.exp(x.astype(np.longdouble)).astype(float)]]))
`;
    const [xs, hex] = JSON.parse(python(script)) as [number[], string[]];
    const { exp: call } = kernels.workbench(0).call;
    let [worst, worstReference] = [0, 0];
    xs.forEach((x, i) => {
      const value = fromHex(hex[i]);
      worst = Math.max(worst, Math.abs(call(x) / value - 1));
      worstReference = Math.max(worstReference, Math.abs(exp(x) / value - 1) / ((Math.abs(x) + 8) * 2 ** -52));
    });
    expect(xs.length).toBe(47328);
    expect(worst).toBeLessThan(4e-16);
    expect(worstReference).toBeLessThan(1);
  });

  it("ends where numbers end", () => {
    const { exp: call } = kernels.workbench(0).call;
    expect([call(-708.0001), call(-1e300), call(Number.NEGATIVE_INFINITY)]).toEqual([0, 0, 0]);
    expect([call(709.0001), call(Number.POSITIVE_INFINITY)]).toEqual([Infinity, Infinity]);
    expect(call(Number.NaN)).toBeNaN();
    expect(call(0)).toBe(1);
    expect(call(-708)).toBeGreaterThan(3e-308);
  });
});

/** The double that Python's float.hex() wrote. */
function fromHex(text: string): number {
  const [, whole, digits, power] = /^0x([01])\.([0-9a-f]+)p([+-]\d+)$/.exec(text) as RegExpExecArray;
  return (Number(whole) + Number.parseInt(digits, 16) / 16 ** digits.length) * 2 ** Number(power);
}
