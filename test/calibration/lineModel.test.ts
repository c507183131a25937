/** Centres and errors of pixel-integrated Gaussians, against scipy's curve_fit with absolute errors, and against scatter. */
import { describe, expect, it } from "vitest";
import { fitLines } from "../../src/calibration/lineModel.js";
import { judgeMissing, python } from "../judges.js";
import { makeSpectra } from "./lineSpectra.js";

const curveFit = `
import json, sys
import numpy as np
from scipy.optimize import curve_fit
from scipy.special import ndtr
job = json.load(sys.stdin)
n, middle = job["n"], job["middle"]
def model(j, *p):
    s, a, b = p[2 * n:]
    m = a + b * (j - middle)
    for i in range(n):
        m = m + p[2 * i] * (ndtr((j + .5 - p[2 * i + 1]) / s) - ndtr((j - .5 - p[2 * i + 1]) / s))
    return m
p, c = curve_fit(model, np.array(job["j"], float), np.array(job["y"]), p0=job["p0"],
                 sigma=np.sqrt(np.array(job["v"])), absolute_sigma=True, xtol=1e-13, ftol=1e-13, gtol=1e-13)
print(json.dumps({"p": p.tolist(), "e": np.sqrt(np.diag(c)).tolist()}))
`;

describe.skipIf(judgeMissing("scipy"))("line fits against curve_fit", () => {
  it.each([
    ["one line", [{ x: 21.37, electrons: 9000 }], 14, 29],
    ["a faint one", [{ x: 20.81, electrons: 700 }], 15, 28],
    [
      "two of one width",
      [
        { x: 18.2, electrons: 5000 },
        { x: 21.9, electrons: 12000 },
      ],
      12,
      29,
    ],
    [
      "three",
      [
        { x: 15.4, electrons: 5000 },
        { x: 19.9, electrons: 2000 },
        { x: 25.1, electrons: 60000 },
      ],
      9,
      32,
    ],
  ])("%s", (_name, lines, from, to) => {
    const { flux, variance } = makeSpectra([lines], { nx: 60 });
    variance[from + 2] = Number.NaN; // a point that is not to be used
    const fit = fitLines(
      flux,
      variance,
      from,
      to,
      lines.map(({ x }) => x + 0.3),
      1.2,
    )!;
    const j = Array.from({ length: to - from }, (_, i) => from + i).filter((i) => i !== from + 2);
    const job = {
      ...{ n: lines.length, middle: (from + to - 1) / 2, j, y: j.map((i) => flux[i]), v: j.map((i) => variance[i]) },
      p0: [...lines.flatMap(({ x, electrons }) => [electrons, x]), 1, 30, 0],
    };
    const { p, e } = JSON.parse(python(curveFit, [], JSON.stringify(job)));
    lines.forEach((_, i) => {
      expect(Math.abs(fit.x[i] - p[2 * i + 1])).toBeLessThan(1e-3 * e[2 * i + 1]);
      expect(fit.error[i] / e[2 * i + 1]).toBeCloseTo(1, 3);
      expect(fit.electrons[i] / p[2 * i]).toBeCloseTo(1, 4);
      expect(fit.electronsError[i] / e[2 * i]).toBeCloseTo(1, 3);
    });
    expect(fit.sigma / p[2 * lines.length]).toBeCloseTo(1, 4);
    expect(fit.sigmaError / e[2 * lines.length]).toBeCloseTo(1, 3);
    expect(fit.converged).toBe(true);
    expect(fit.freedom).toBe(j.length - 2 * lines.length - 3);
  });
});

describe("line fits", () => {
  it("give back noiseless lines exactly, wherever they stand on the pixels", () => {
    for (const x of [10, 10.25, 10.5, 10.93]) {
      const { flux, variance } = makeSpectra([[{ x, electrons: 5e4 }]], { nx: 24, noise: 0 });
      const fit = fitLines(flux, variance, 4, 18, [10], 0.8)!;
      expect(fit.x[0]).toBeCloseTo(x, 6);
      expect(fit.sigma).toBeCloseTo(0.93, 6);
      expect(fit.electrons[0]).toBeCloseTo(5e4, 1);
    }
  });

  it("lean on a width that is known, and count it as no unknown", () => {
    const { flux, variance } = makeSpectra([[{ x: 10.4, electrons: 400 }]], { nx: 24 });
    const alone = fitLines(flux, variance, 4, 18, [10], 0.93)!;
    const leaning = fitLines(flux, variance, 4, 18, [10], 0.93, { sigma: 0.93, error: 0.001 })!;
    expect(leaning.sigmaError).toBeLessThan(0.0011);
    expect(leaning.sigmaError).toBeGreaterThan(0.0009);
    expect(leaning.electronsError[0]).toBeLessThan(alone.electronsError[0]);
    expect(leaning.freedom).toBe(alone.freedom + 1);
  });

  it("refuse points too few for their unknowns", () => {
    const { flux, variance } = makeSpectra([[{ x: 10.4, electrons: 4000 }]], { nx: 24 });
    expect(fitLines(flux, variance, 8, 13, [10], 0.93)).toBeNull();
    expect(fitLines(flux, variance, 8, 14, [10], 0.93)).not.toBeNull();
  });
});
