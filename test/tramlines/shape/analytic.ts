/** A shape that is known in closed form, with every term at work, and lines to go with it. Invented data. */

import { nShapeTerm, type ShapeTable } from "../../../src/reference/shape.js";
import type { Lines } from "../../../src/reference/shapeProfiles.js";
import { normalCumulative, normalDensity } from "../../../src/simulate/gaussian.js";

const referenceWidth = 1.1;
const reach = 14;
const pointsPerPixel = 32;

/** Heights of the terms beyond the first, all different. */
const heights = [0.021, -0.013, 0.034, 0.027, -0.019, 0.0031];
/** Their widths, v. */
const widths = [1.3, 1.7, 1.2, 2.1, 1.5, 1.1];

/** C_m(v): two Gaussians apart, then bumps that return to 0. */
export function trueCumulative(v: number): number[] {
  const whole = 0.8 * normalCumulative(v / 1.1) + 0.2 * normalCumulative((v - 0.4) / 1.9);
  return [whole, ...heights.map((height, i) => height * normalDensity(v / widths[i]))];
}

function slopes(v: number): number[] {
  const whole = (0.8 / 1.1) * normalDensity(v / 1.1) + (0.2 / 1.9) * normalDensity((v - 0.4) / 1.9);
  return [whole, ...heights.map((height, i) => (-height * v * normalDensity(v / widths[i])) / widths[i] ** 2)];
}

/** ∫ v c_m dv by parts: 0.2 · 0.4 for the first, −∫ C_m dv for a bump. */
export const trueCentroids = [0.08, ...heights.map((height, i) => -height * widths[i])];

/** The table of it. Between its points the cubic errs by h⁴/384 · max|C⁗| = 4e-9 (h = 1/32, |C⁗| < 1.5). */
export function analyticTable(): ShapeTable {
  const n = 2 * reach * pointsPerPixel + 1;
  const values = new Float64Array(n * 2 * nShapeTerm);
  for (let i = 0; i < n; i++) {
    const v = -reach + i / pointsPerPixel;
    values.set([...trueCumulative(v), ...slopes(v)], i * 2 * nShapeTerm);
  }
  return { start: -reach, step: 1 / pointsPerPixel, n, values, referenceWidth, centroid: new Float64Array(nShapeTerm) };
}

/** `nFibre` lines at uneven distances of some `pitch` pixels, bent, the first at `from`, of widths around the reference. */
export function analyticLines(nFibre: number, ny: number, pitch = 5.2, from = 6.3): Lines {
  const trace = new Float64Array(nFibre * 3);
  const width = new Float64Array(nFibre * 2);
  for (let k = 0; k < nFibre; k++) {
    trace.set([from + pitch * k + 0.3 * Math.sin(5 * k), 0.8 + 0.04 * k, 0.5 - 0.03 * k], 3 * k);
    width.set([referenceWidth * (1 + 0.04 * Math.sin(3 * k + 1)), 0.03], 2 * k);
  }
  return { nx: 90, ny, nFibre, trace, nTrace: 3, width, nWidth: 2 };
}
