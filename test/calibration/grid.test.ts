import { describe, expect, test } from "vitest";
import { gridEdges, gridWavelength, LIGHT_SPEED, makeGrid } from "../../src/calibration/grid.js";

/** Two fibres of 50 columns, 5000 + 2x and 5003 + 2x Å, and one without wavelengths. */
const nx = 50;
const data = Float64Array.from({ length: 3 * nx }, (_, i) =>
  i < 2 * nx ? 5000 + 3 * Math.floor(i / nx) + 2 * (i % nx) : Number.NaN,
);

describe("a grid", () => {
  test("left open reaches over all fibres in steps of their median dispersion", () => {
    const grid = makeGrid({ kind: "linear" }, data, nx, "air");
    // From 5000 to 5003 + 98, in steps of 2: the last middle at or beyond.
    expect(grid).toEqual({ kind: "linear", medium: "air", start: 5000, step: 2, n: 52 });
    expect(gridWavelength(grid, 51)).toBe(5102);
    expect([...gridEdges(grid).slice(0, 2)]).toEqual([4999, 5001]);
  });

  test("in velocity has bins of the same Doppler width, and the same ratio of edges", () => {
    const step = 30 / LIGHT_SPEED;
    const grid = makeGrid({ kind: "log", start: 5000, end: 5100, step }, data, nx, "vacuum");
    const edges = gridEdges(grid);
    for (let b = 0; b < grid.n; b++) expect(Math.log(edges[b + 1] / edges[b]) * LIGHT_SPEED).toBeCloseTo(30, 8);
    expect(gridWavelength(grid, grid.n - 1)).toBeGreaterThanOrEqual(5100);
    expect(gridWavelength(grid, grid.n - 2)).toBeLessThan(5100);
  });

  test("given by its ends and number has them", () => {
    for (const kind of ["linear", "log"] as const) {
      const grid = makeGrid({ kind, start: 4800, end: 5250.5, number: 37 }, data, nx, "air");
      expect(grid.n).toBe(37);
      expect(gridWavelength(grid, 36)).toBeCloseTo(5250.5, 9);
    }
    expect(makeGrid({ kind: "linear", step: 0.5, number: 11 }, data, nx, "air")).toMatchObject({ start: 5000, n: 11 });
  });

  test("of falling wavelengths rises all the same", () => {
    const grid = makeGrid({ kind: "linear" }, data.slice(0, nx).reverse(), nx, "air");
    expect(grid).toMatchObject({ start: 5000, step: 2, n: 50 });
  });

  test.each([
    [{ end: 4000 }, "The grid would run from 5000 to 4000 Å; give an end above the start, both over 0."],
    [{ start: -1 }, "The grid would run from -1 to 5101 Å; give an end above the start, both over 0."],
    [{ step: 0 }, "The step is 0; it must be over 0."],
    [{ number: 1 }, "The number of bins is 1; it must be a whole number, 2 or more."],
    [{ end: 6000, step: 1, number: 9 }, "End, step and number of bins are all given; leave one of the three out."],
    [
      { start: 5000, end: 5100, step: 1e-5 },
      "A grid from 5000 to 5100 Å would have 10000001 bins; 2 to 1000000 are made, so check the step and its unit.",
    ],
  ])("is refused for %j", (request, sentence) => {
    expect(() => makeGrid({ kind: "linear", ...request }, data, nx, "air")).toThrow(sentence);
  });

  test("needs wavelengths", () => {
    const none = new Float64Array(10).fill(Number.NaN);
    expect(() => makeGrid({ kind: "log" }, none, 10, "air")).toThrow("No fibre has wavelengths");
  });
});
