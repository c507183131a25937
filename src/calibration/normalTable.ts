/** The normal distribution's Φ(u) and density φ(u) from a table, by Hermite's cubic between its knots: both have their
 * derivatives at hand, φ and −u·φ. For fits that ask for them by the million. */
import { exp } from "../reference/exp.js";

const knotsPerUnit = 64;
/** Beyond this, Φ is 0 or 1 to 1e-11. */
export const farthest = 7;

const nKnot = 2 * farthest * knotsPerUnit + 1;
const cumulativeAt = new Float64Array(nKnot);
const densityAt = new Float64Array(nKnot);
fill();

/** Φ summed from knot to knot by Gauss's three-point rule (Abramowitz & Stegun 25.4.30), whose error here is of order h⁷. */
function fill(): void {
  const density = (u: number) => 0.3989422804014327 * exp(-0.5 * u * u); // 1/√(2π)
  const half = 0.5 / knotsPerUnit;
  const off = half * 0.7745966692414834; // √(3/5)
  let sum = 1.279812543886e-12; // Φ(−7)
  for (let i = 0; i < nKnot; i++) {
    const u = i / knotsPerUnit - farthest;
    densityAt[i] = density(u);
    cumulativeAt[i] = sum;
    const middle = u + half;
    sum += (half * (5 * (density(middle - off) + density(middle + off)) + 8 * density(middle))) / 9;
  }
}

/** Φ(u). Absolute error below 1e-9: h⁴/384 · max |φ‴| with h = 1/64. */
export function normalCumulative(u: number): number {
  if (!(u > -farthest)) return 0;
  if (!(u < farthest)) return 1;
  const at = (u + farthest) * knotsPerUnit;
  const i = Math.floor(at);
  return hermite(at - i, cumulativeAt[i], cumulativeAt[i + 1], densityAt[i], densityAt[i + 1]);
}

/** φ(u). Absolute error below 1e-9. */
export function normalDensity(u: number): number {
  if (!(u > -farthest && u < farthest)) return 0;
  const at = (u + farthest) * knotsPerUnit;
  const i = Math.floor(at);
  const low = i / knotsPerUnit - farthest;
  const high = low + 1 / knotsPerUnit;
  return hermite(at - i, densityAt[i], densityAt[i + 1], -low * densityAt[i], -high * densityAt[i + 1]);
}

function hermite(f: number, y0: number, y1: number, slope0: number, slope1: number): number {
  const g = 1 - f;
  const bend = g * slope0 - f * slope1 + (f - g) * (y1 - y0) * knotsPerUnit;
  return g * y0 + f * y1 + (f * g * bend) / knotsPerUnit;
}
