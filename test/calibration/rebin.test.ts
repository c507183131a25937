/** Spectra on a common grid: laws of conservation, and what becomes of fibres and pixels without values. */
import { describe, expect, it } from "vitest";
import { gridEdges, type SpectralGrid } from "../../src/calibration/grid.js";
import { rebinSpectra } from "../../src/calibration/rebin.js";
import { Flag } from "../../src/extraction/spectra.js";
import { openStream } from "../../src/random/streams.js";
import { kill, spectraOf } from "./products.js";

const nFibre = 5;
const nx = 120;
/** Each fibre's own, falling in the last two; fibre 3 has none. */
const wavelength = (k: number, x: number) => {
  if (k === 2) return Number.NaN;
  const at = k >= 3 ? nx - 1 - x : x;
  return 6000 + 0.7 * k + 1.61 * at + 1e-4 * at * at;
};
const image = Float64Array.from({ length: nFibre * nx }, (_, i) => wavelength(Math.floor(i / nx), i % nx));
const wavelengths = { medium: "air" as const, image };
const stream = openStream(3, "rebin");
const noise = Float64Array.from({ length: nFibre * nx }, () => stream.uniform());
const make = () =>
  spectraOf(
    nFibre,
    nx,
    (k, x) => 50 + 10 * k + noise[k * nx + x],
    (k, x) => 1 + noise[k * nx + x],
  );
const sum = (values: ArrayLike<number>) => Array.from(values).reduce((a, b) => a + b, 0);
/** Wider than all fibres. */
const wide: SpectralGrid = { kind: "linear", medium: "air", start: 5990, step: 1.9, n: 130 };
const LINEAR: SpectralGrid = { kind: "linear", medium: "air", start: 6010, step: 1.3, n: 100 };
const LOG: SpectralGrid = { kind: "log", medium: "air", start: 6010, step: 2.4e-4, n: 100 };

describe.each([LINEAR, LOG])("rebinned spectra, $kind", (grid) => {
  it("hold all the light between the grid's ends to 1e-12, rising or falling", () => {
    const spectra = make();
    const { spectra: out } = rebinSpectra({ spectra }, wavelengths, grid);
    const edges = gridEdges(grid);
    for (const k of [0, 1, 3, 4]) {
      // Counts below a wavelength, each pixel's spread evenly between edges half way (in x) to the next.
      const below = (limit: number) => {
        let total = 0;
        for (let x = 0; x < nx; x++) {
          const ends = [wavelengthAt(k, x - 0.5), wavelengthAt(k, x + 0.5)].sort((a, b) => a - b);
          const share = Math.min(1, Math.max(0, (limit - ends[0]) / (ends[1] - ends[0])));
          total += share * spectra.flux[k * nx + x];
        }
        return total;
      };
      const total = sum(out.flux.subarray(k * grid.n, (k + 1) * grid.n));
      expect(Math.abs(total / (below(edges[grid.n]) - below(edges[0])) - 1)).toBeLessThan(1e-12);
    }
  });
});

function wavelengthAt(k: number, x: number): number {
  const at = k >= 3 ? nx - 1 - x : x;
  return 6000 + 0.7 * k + 1.61 * at + 1e-4 * at * at;
}

describe("rebinned spectra", () => {
  it("of pixels half a bin aside have half the variance, and a quarter of it as covariance", () => {
    const even = { medium: "air" as const, image: image.map((_, i) => 6000 + 2 * (i % nx)) };
    const grid: SpectralGrid = { kind: "linear", medium: "air", start: 6001, step: 2, n: nx - 1 };
    const spectra = spectraOf(nFibre, nx, (_k, x) => x);
    const { spectra: out, binCovariance, neglected } = rebinSpectra({ spectra }, even, grid);
    for (let b = 0; b < nx - 2; b++) {
      expect(out.flux[b]).toBeCloseTo(b + 0.5, 8);
      expect(out.variance[b]).toBeCloseTo(0.5, 8);
      expect(binCovariance[b]).toBeCloseTo(0.25, 8);
      // Two fibres that share light in a column, −0.1, share it in half of two bins.
      expect(out.neighbourCovariance[b]).toBeCloseTo(-0.05, 8);
    }
    expect(neglected).toBeCloseTo(0, 8);
    expect(binCovariance[nx - 2]).toBeNaN();
    expect(out.neighbourCovariance.subarray(4 * grid.n).every((value) => Number.isNaN(value))).toBe(true);
  });

  it("in bins narrower than pixels say how much more than the next bin's covariance there is", () => {
    // Four bins a pixel: its light is shared by all four, var = V/16, Σ cov over d = 1, 2, 3 = 3/16 within the pixel.
    const even = { medium: "air" as const, image: image.map((_, i) => 6000 + 2 * (i % nx)) };
    const grid: SpectralGrid = { kind: "linear", medium: "air", start: 6000 - 0.75, step: 0.5, n: 4 * nx };
    const { neglected } = rebinSpectra({ spectra: make() }, even, grid);
    // Of those from bin 0, 1, 2, 3 of a pixel on, forward and counted twice: 2·(2, 1, 0, 0); the median of them.
    expect(neglected).toBeGreaterThanOrEqual(0);
    expect(neglected).toBeLessThanOrEqual(4);
    const coarse = rebinSpectra({ spectra: make() }, even, { ...grid, start: 6010, step: 7, n: 20 });
    expect(coarse.neglected).toBeCloseTo(0, 9);
  });

  it("keep each fibre's row: without wavelengths, dead, and beyond its own range", () => {
    const spectra = make();
    kill(spectra, 1);
    const { spectra: out } = rebinSpectra({ spectra }, wavelengths, wide);
    const row = (values: ArrayLike<number>, k: number) => Array.from(values).slice(k * wide.n, (k + 1) * wide.n);
    for (const k of [1, 2]) expect(row(out.flux, k).every((value) => Number.isNaN(value))).toBe(true);
    expect(row(out.flags, 2).every((bits) => bits === Flag.noWavelength)).toBe(true);
    expect(row(out.flags, 1)[60]).toBe(Flag.dead);
    expect(row(out.flags, 0)[0]).toBe(Flag.outside);
    expect(row(out.flux, 0)[0]).toBeNaN();
    expect(row(out.flags, 0)[60]).toBe(0);
    expect(row(out.neighbourCovariance, 0)[60]).toBeNaN(); // the next is dead
    expect(row(out.neighbourCovariance, 3)[60]).toBeLessThan(0);
  });

  it("carry flags, and have no value where more than the share that was set is lost", () => {
    const spectra = make();
    spectra.flags[40] = Flag.cosmicRay;
    spectra.flags[60] = Flag.saturated;
    spectra.flux[60] = 1e9;
    spectra.flux[80] = Number.NaN;
    const grid: SpectralGrid = { kind: "linear", medium: "air", start: 6004, step: 8, n: 24 };
    const strict = rebinSpectra({ spectra }, wavelengths, grid).spectra;
    const lenient = rebinSpectra({ spectra }, wavelengths, grid, { mostLost: 0.3 }).spectra;
    const bin = (x: number) => Math.round((wavelengthAt(0, x) - 6004) / 8);
    expect(strict.flags[bin(40)]).toBe(Flag.cosmicRay);
    expect([strict.flux[bin(60)], strict.flags[bin(60)]]).toEqual([Number.NaN, Flag.saturated]);
    expect([strict.flux[bin(80)], strict.flags[bin(80)]]).toEqual([Number.NaN, Flag.weightLost]);
    // What is left stands for the whole: an even spectrum stays even.
    expect(lenient.flux[bin(60)] / lenient.flux[bin(52)]).toBeCloseTo(1, 1);
    expect(lenient.flags[bin(60)]).toBe(Flag.badPixel);
  });

  it("take the covariance between columns along", () => {
    const spectra = make();
    const columnCovariance = new Float32Array(nFibre * nx).fill(0.25);
    const plain = rebinSpectra({ spectra }, wavelengths, wide).spectra;
    const joined = rebinSpectra({ spectra, columnCovariance }, wavelengths, wide).spectra;
    const middle = 60;
    // Whole bins of 1.9/1.63 pixels: the sum of their weights' products with the next pixel's, twice.
    expect(joined.variance[middle]).toBeGreaterThan(plain.variance[middle] + 0.02);
  });

  it.each(["rising", "falling"])("say where a bin lies partly off the detector, wavelength %s", (way) => {
    // Pixels of 2 Å, the outermost ending at 5999 and 6239 Å: bins that lie 5 %, 45 % and wholly beyond either end.
    const even = image.map((_, i) => (way === "rising" ? 6000 + 2 * (i % nx) : 6238 - 2 * (i % nx)));
    const ends = (start: number, step: number, n: number) => {
      const grid: SpectralGrid = { kind: "linear", medium: "air", start, step, n };
      const { flux, flags } = rebinSpectra({ spectra: make() }, { medium: "air", image: even }, grid).spectra;
      return [0, n - 1].map((b) => ({ has: !Number.isNaN(flux[b]), flags: flags[b] }));
    };
    // Its sound part stands for the rest, and it says so.
    const little = { has: true, flags: Flag.badPixel };
    expect(ends(5999.9, 2, 120)).toEqual([little, { has: true, flags: 0 }]);
    expect(ends(6000.1, 2, 120)).toEqual([{ has: true, flags: 0 }, little]);
    const much = { has: false, flags: Flag.outside };
    expect(ends(5999.1, 2, 120)).toEqual([much, { has: true, flags: 0 }]);
    expect(ends(6000.9, 2, 120)).toEqual([{ has: true, flags: 0 }, much]);
    expect(ends(5990, 2, 130)).toEqual([much, much]);
  });
});
