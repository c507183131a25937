import { describe, expect, it } from "vitest";
import type { Region } from "../../src/detector/assemble.js";
import { pixelResponse } from "../../src/detector/response.js";
import { normalDeviate } from "../scene.js";
import { amplifierOf, momentsOf, seeded } from "./rawFrames.js";

const NX = 200;
const NY = 130;
const region = (x0: number, x1: number): Region => ({
  x0,
  x1,
  y0: 0,
  y1: NY,
  readVariance: 9,
  amplifier: amplifierOf("[1:1,1:1]", []),
});
const REGIONS = [region(0, 80), region(80, NX)];
const white = (() => {
  const next = seeded(77);
  return Float64Array.from({ length: NX * NY }, () => 0.0095 * normalDeviate(next));
})();
const response = (x: number, y: number) => {
  if (x === 31) return 0.05;
  if (x === 150 && y === 77) return 7;
  return 1 + white[y * NX + x];
};
/** Illumination of some 20 % range, and a step between amplifiers as a wrong gain makes it. */
const lamp = (x: number, y: number) =>
  26000 * (1 - 0.2 * ((x - 70) / NX) ** 2 + 0.05 * Math.sin(y / 40)) * (x < 80 ? 1.08 : 1);

function flat(noise: number) {
  const next = seeded(3);
  const at = (f: (x: number, y: number) => number) =>
    Float32Array.from({ length: NX * NY }, (_, i) => f(i % NX, Math.floor(i / NX)));
  return {
    mean: at((x, y) => lamp(x, y) * response(x, y) + noise * normalDeviate(next)),
    variance: at(() => noise * noise),
    clippedShare: [0],
  };
}

describe("pixel response", () => {
  const made = pixelResponse(flat(50), NX, NY, REGIONS);

  it("is the flat without lamp and gain step, to its own variance", () => {
    const pulls: number[] = [];
    made.response.forEach((r, i) => {
      if (made.unusable[i]) return;
      const truth = response(i % NX, Math.floor(i / NX));
      pulls.push((r - truth) / (r * Math.sqrt(made.relativeVariance[i])));
    });
    const { mean, sigma, n } = momentsOf(pulls);
    // r has mean 1, the true responses' mean strays by 0.0095/√25 870 = 6e-5: 0.03 of σ_r = 0.0019. The shape's own
    // error, 0.0095/√(2300 pixels a coefficient) = 2e-4, adds about 1 % to the pulls.
    expect(Math.abs(mean)).toBeLessThan(0.1);
    expect(Math.abs(sigma - 1)).toBeLessThan(0.08);
    expect(n).toBe(NX * NY - NY - 1);
  });

  it("gives dead and glued pixels 1, and calls them unusable", () => {
    const at = 40 * NX + 31;
    expect([made.response[at], made.unusable[at], made.unusable[77 * NX + 150]]).toEqual([1, 1, 1]);
  });

  it("tells the scatter of each amplifier", () => {
    // 50 / 26 000 adds 0.0019 in square.
    for (const scatter of made.scatter) expect(Math.abs(scatter / Math.hypot(0.0095, 0.0019) - 1)).toBeLessThan(0.05);
  });

  it("says nothing where the lamp does not reach", () => {
    const half = flat(5);
    for (let i = 0; i < NX * NY; i++) if (i % NX > 160) half.mean[i] = 3 + (i % 5);
    const { response: r, unusable } = pixelResponse(half, NX, NY, [region(0, 80), region(80, 161), region(161, NX)]);
    expect([r[20 * NX + 180], unusable[20 * NX + 180], unusable[20 * NX + 100]]).toEqual([1, 1, 0]);
  });
});
