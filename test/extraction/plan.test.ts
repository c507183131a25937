import { describe, expect, it } from "vitest";
import { planExtraction } from "../../src/extraction/plan.js";
import type { Tramlines } from "../../src/tramlines/tramlines.js";
import { frameScene } from "./frames.js";

/** Straight lines at `centres`, climbing `slope` pixels a column. */
function lines(centres: number[], slope: number, sigma = 1, nx = 401): Tramlines {
  const { tramlines } = frameScene({ nx: 17, ny: 40, nFibre: centres.length, pitch: 1 });
  const half = (slope * (nx - 1)) / 2;
  return {
    ...tramlines,
    nx,
    ny: 400,
    legendre: Float64Array.from(centres.flatMap((y) => [y, half, 0, 0])),
    profile: {
      kind: "gaussian",
      sigma: Float64Array.from(centres.flatMap(() => [sigma, 0.02])),
      widthDegree: 1,
      relativeError: 0,
    },
  };
}

describe("plan of an extraction", () => {
  it.each([
    [0.009, 64],
    [0.0095, 32],
    [-0.009, 64],
    [0.037, 16],
    [0.038, 8],
    [-0.4, 4],
  ])("lets a line move 0.6 px in a block where σ is 0.8 px: slope %d gives %d columns", (slope, columns) => {
    expect(planExtraction(lines([50.2, 60.1, 71], slope, 0.82)).blockColumns).toBe(columns);
  });

  it("makes windows of 4.75 σ of the broadest fibre and counts fibres whose windows can meet", () => {
    // σ reaches 1.02 at one end: 4.85, and the line strays by 0.32 px: 6 px, a window of 13 rows; rows can be shared up to
    // 14 px apart.
    const plan = planExtraction(lines([50.2, 55.1, 60.3, 64.1, 80, 93.9], 0.01));
    expect(plan.halfWindow).toBe(6);
    expect(planExtraction(lines([50.2, 60.3], 0.01, 1.19)).halfWindow).toBe(7); // σ up to 1.21: 5.75 + 0.32
    expect(plan.bandwidth).toBe(3); // 50.2 and 64.1: 13.9 px
    expect(planExtraction(lines([50, 55.1, 60.3, 64.1, 80, 93.9], 0.01)).bandwidth).toBe(2); // 14.1 px
    expect(plan.smallestPitch).toBeCloseTo(3.8, 10);
  });

  it("looks as far as an aperture that was asked for", () => {
    expect(planExtraction(lines([50.2, 70.3], 0.01), 10).halfWindow).toBe(11);
    expect(planExtraction(lines([50.2, 70.3], 0.01), 2).halfWindow).toBe(
      planExtraction(lines([50.2, 70.3], 0.01)).halfWindow,
    );
  });

  it("sees blends: at 2 px, six fibres lie within a window's reach", () => {
    expect(planExtraction(lines([50, 52, 54, 56, 58, 60, 62, 64, 66, 68], 0)).bandwidth).toBe(5);
  });

  it("leaves dead fibres out, and their place in the order to the others", () => {
    const tramlines = lines([50.2, 55.1, 60.3, 64.1], 0);
    tramlines.state[1] = "dead";
    tramlines.state[2] = "dim";
    const plan = planExtraction(tramlines);
    expect(plan.active).toEqual([0, 2, 3]);
    expect(plan.smallestPitch).toBeCloseTo(3.8, 10);
  });

  it("refuses tramlines without a lit fibre, and such as cross", () => {
    const tramlines = lines([50.2, 55.1], 0);
    const crossing = { ...tramlines, legendre: Float64Array.of(50.2, 4, 0, 0, 55.1, -4, 0, 0) };
    expect(() => planExtraction(crossing)).toThrow(
      "Two tramlines cross; the fibres' order along y must be that of the slit.",
    );
    tramlines.state.fill("dead");
    expect(() => planExtraction(tramlines)).toThrow("The tramlines hold no lit fibre; there is nothing to extract.");
  });
});
