/** The joint fit against a known scale, and against numpy's Legendre fit of a single fibre. Invented data. */
import { describe, expect, it } from "vitest";
import { type DispersionFit, fitDispersion } from "../../src/calibration/dispersion.js";
import type { DispersionFrame, LinePoint } from "../../src/calibration/dispersionSystem.js";
import { CalibrationError } from "../../src/calibration/errors.js";
import { openStream } from "../../src/random/streams.js";
import { legendreArgument, legendreValue } from "../../src/reference/legendre.js";
import { judgeMissing, python } from "../judges.js";

const nx = 1001;
const nFibre = 40;
const slit = Float64Array.from(
  { length: nFibre },
  (_, k) => Math.round(1000 * (-1 + (2 * k) / 39 + 0.01 * (k % 3))) / 1000,
);
const lit = new Uint8Array(nFibre).fill(1);

interface Made {
  frame: DispersionFrame;
  points: LinePoint[];
  /** Å of fibre k at column x. */
  truth: (k: number, x: number) => number;
}

interface Changes {
  nLine?: number;
  fibreScatter?: number;
  listScatter?: number;
  error?: number;
  movedBy?: number;
  seed?: number;
}

function make({
  nLine = 30,
  fibreScatter = 0.05,
  listScatter = 0.002,
  error = 0.01,
  movedBy,
  seed = 1,
}: Changes = {}): Made {
  const dice = openStream(seed, "dispersion");
  const own = Float64Array.from({ length: nFibre }, () => fibreScatter * dice.normal());
  const scale = (x: number, s: number) => {
    const t = (2 * x) / (nx - 1) - 1;
    return 6600 + 2 * s + 3 * s * s + (800 + 1.5 * s) * t + 12 * (1.5 * t * t - 0.5) - 2.8 * (2.5 * t ** 3 - 1.5 * t);
  };
  const truth = (k: number, x: number) => scale(x - own[k], slit[k]);
  const lines = Float64Array.from({ length: nLine }, (_, m) => 5830 + (1540 * (m + 0.8 * dice.uniform())) / nLine);
  const points: LinePoint[] = [];
  for (let exposure = 0; exposure < (movedBy === undefined ? 1 : 2); exposure++) {
    for (let fibre = 0; fibre < nFibre; fibre++) {
      lines.forEach((wavelength, line) => {
        let [low, high] = [-50, nx + 50];
        while (high - low > 1e-9) {
          const middle = (low + high) / 2;
          if (truth(fibre, middle) < wavelength) low = middle;
          else high = middle;
        }
        const sigma = error * (0.5 + (line % 4));
        if (low > 2 && low < nx - 3) {
          points.push({
            fibre,
            exposure,
            line,
            x: low + exposure * (movedBy ?? 0) + sigma * dice.normal(),
            error: sigma,
          });
        }
      });
    }
  }
  const listed = lines.map((wavelength) => wavelength + listScatter * dice.normal());
  return { frame: { nFibre, nx, slit, nExposure: movedBy === undefined ? 1 : 2, wavelength: listed }, points, truth };
}

/** Per fibre: rms of the fit's difference from the truth between its outermost lines, columns. */
function differences({ legendre, degree, seenFrom, seenTo }: DispersionFit, truth: Made["truth"]): number[] {
  return Array.from({ length: nFibre }, (_, k) => {
    let [sum, n] = [0, 0];
    for (let x = Math.ceil(seenFrom[k]); x <= seenTo[k]; x += 10) {
      const at = legendreValue(legendre, legendreArgument(x, nx), k * (degree + 1), degree + 1);
      sum += ((at - truth(k, x)) / (truth(k, x + 0.5) - truth(k, x - 0.5))) ** 2;
      n++;
    }
    return Math.sqrt(sum / n);
  });
}

const rms = (values: number[]) => Math.sqrt(values.reduce((sum, v) => sum + v * v, 0) / values.length);

describe("dispersion", () => {
  it("gives back the scale within errors that hold", () => {
    const ratios: number[] = [];
    for (let seed = 1; seed <= 6; seed++) {
      const { frame, points, truth } = make({ seed });
      const fit = fitDispersion(frame, points, lit);
      const off = differences(fit, truth);
      expect(rms(off)).toBeLessThan(0.006);
      expect(fit.dropped).toEqual([]);
      expect(fit.filled).toEqual([]);
      expect(fit.terms.nX).toBeGreaterThanOrEqual(4);
      expect(fit.scatters.fibre).toBeGreaterThan(0.03);
      expect(fit.scatters.fibre).toBeLessThan(0.08);
      ratios.push(...off.map((value, k) => value / fit.error[k]));
    }
    // The lines' own errors are common to all fibres, so that few of these are independent.
    expect(rms(ratios)).toBeGreaterThan(0.7);
    expect(rms(ratios)).toBeLessThan(1.4);
  });

  it("rises or falls alike", () => {
    const { frame, points, truth } = make();
    const turned = points.map((point) => ({ ...point, x: nx - 1 - point.x }));
    const fit = fitDispersion(frame, turned, lit);
    expect(rms(differences(fit, (k, x) => truth(k, nx - 1 - x)))).toBeLessThan(0.006);
  });

  it("names a line that all fibres see elsewhere, and single points are clipped", () => {
    const { frame, points, truth } = make();
    frame.wavelength = Float64Array.from(frame.wavelength);
    (frame.wavelength as Float64Array)[11] += 0.15;
    (frame.wavelength as Float64Array)[22] -= 0.4;
    points[333].x += 0.5;
    const fit = fitDispersion(frame, points, lit);
    expect(fit.dropped.map(({ line }) => line).sort()).toEqual([11, 22]);
    const wrong = fit.dropped.find(({ line }) => line === 22)!;
    expect(wrong.off).toBeCloseTo(0.4, 1);
    expect(wrong.nFibre).toBe(40);
    expect(fit.used[333]).toBe(0);
    expect(rms(differences(fit, truth))).toBeLessThan(0.006);
    expect(fit.residual[333]).toBeCloseTo(0.5, 1);
  });

  it("finds where a second exposure lies, and uses both", () => {
    const { frame, points, truth } = make({ movedBy: -0.031 });
    const fit = fitDispersion(frame, points, lit);
    expect(fit.exposure[0]).toBe(0);
    expect(fit.exposure[1]).toBeCloseTo(-0.031, 3);
    expect(rms(differences(fit, truth))).toBeLessThan(0.005);
  });

  it("fills a fibre with too few lines, with an error as large as fibres' offsets; a dead one has nothing", () => {
    const { frame, points, truth } = make();
    const some = points.filter(({ fibre, line }) => fibre !== 9 && (fibre !== 17 || line < 2));
    const alive = lit.map((value, k) => (k === 9 ? 0 : value));
    const fit = fitDispersion(frame, some, alive);
    expect(fit.filled).toEqual([17]);
    expect(fit.nLine[17]).toBe(0);
    expect(fit.rms[17]).toBeNaN();
    expect(fit.error[17]).toBeGreaterThan(0.03);
    expect(differences(fit, truth)[17]).toBeLessThan(4 * fit.error[17]);
    expect(fit.legendre[9 * (fit.degree + 1)]).toBeNaN();
    expect(fit.error[9]).toBeNaN();
  });

  it("takes no more terms than the lines can tell", () => {
    const { frame, points } = make({ nLine: 9 });
    const fit = fitDispersion(frame, points, lit);
    expect(fit.terms.nX).toBeLessThanOrEqual(4);
    expect(() =>
      fitDispersion(
        frame,
        points.filter(({ line }) => line < 3),
        lit,
      ),
    ).toThrow(CalibrationError);
    expect(() =>
      fitDispersion(
        frame,
        points.filter(({ line }) => line < 3),
        lit,
      ),
    ).toThrow("Only 3 identified lines");
  });
});

const legfit = `
import json, sys
import numpy as np
job = json.load(sys.stdin)
c = np.polynomial.legendre.legfit(job["t"], job["y"], job["degree"], w=np.sqrt(job["w"]))
print(json.dumps(c.tolist()))
`;

it.skipIf(judgeMissing("scipy"))("a single fibre with a perfect list is numpy's weighted Legendre fit", () => {
  const { frame, points } = make({ listScatter: 0 });
  const own = points.filter(({ fibre }) => fibre === 20).map((point) => ({ ...point, fibre: 0 }));
  const one = { ...frame, nFibre: 1, slit: Float64Array.of(0) };
  const fit = fitDispersion(one, own, [1]);
  const slope = own.map(({ x }) => {
    const at = (column: number) => legendreValue(fit.legendre, legendreArgument(column, nx));
    return at(x + 0.5) - at(x - 0.5);
  });
  const job = {
    ...{ t: own.map(({ x }) => legendreArgument(x, nx)), y: own.map(({ line }) => frame.wavelength[line]) },
    ...{ degree: fit.degree, w: own.map(({ error }, i) => 1 / (error * slope[i]) ** 2) },
  };
  const theirs: number[] = JSON.parse(python(legfit, [], JSON.stringify(job)));
  for (let x = 20; x < nx - 20; x += 60) {
    const t = legendreArgument(x, nx);
    // A fraction of the error of 0.004 px, or 0.006 Å: the lines' own errors are allowed for here, and not there.
    expect(Math.abs(legendreValue(fit.legendre, t) - legendreValue(theirs, t))).toBeLessThan(0.004);
  }
});
