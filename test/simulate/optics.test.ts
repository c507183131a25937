import { describe, expect, test } from "vitest";
import { spreadFibres } from "../../src/simulate/image.js";
import { buildOptics, columnOf, type Optics, wavelengthAt } from "../../src/simulate/optics.js";
import { makeSpectra } from "../../src/simulate/spectra.js";
import { smallScene, sum } from "./benches.js";

const ONE_FIBRE = {
  detector: "size = [90, 160]\n[[detector.amplifier]]\ngain = 1\nread_noise = 3",
  slit: "blocks = [1]\npitch = 5\nfirst = 77.3",
  rest: `[tramlines]
tilt = 3
bow = 6
curl = -0.4
quartic = 0.3
[profile]
fwhm = 2.4
tilt = 0.1
second_share = 0.15
second_offset = 0.25
second_tilt = 0.3
wing_share = 0.02
reach = 45
[wavelength]
range = [6400, 6000]`,
  exposures: '[[exposure]]\nname = "fflat_01"\nkind = "fibre-flat"\nseconds = 5',
};

function built(parts: Parameters<typeof smallScene>[0]) {
  const scene = smallScene(parts);
  const exposure = scene.exposure[0];
  return { scene, exposure, optics: buildOptics(scene, exposure) };
}

/** Flux-weighted mean row of one column. */
function centroid(image: Float64Array, { nx, ny }: Optics, x: number): number {
  const column = Float64Array.from({ length: ny }, (_v, y) => image[y * nx + x]);
  return sum(column.map((v, y) => v * y)) / sum(column);
}

describe("tramlines", () => {
  test("the light's centroid runs along the trace, whatever the profile's skew and wings", () => {
    const { scene, exposure, optics } = built(ONE_FIBRE);
    const { flux } = makeSpectra(scene, exposure, optics);
    const image = spreadFibres(optics, flux);
    for (let x = 0; x < optics.nx; x++) {
      // Summing pixel centres differs from the integral by share/π · 1/(1 + (2πL)²) = 1e-5 px for a wing of L = 4 px
      // (Poisson's summation formula); 3e-7 px where the wing ends.
      expect(Math.abs(centroid(image, optics, x) - optics.trace[x])).toBeLessThan(2e-5);
    }
  });

  test("they are the Legendre series of the scene: ends and middle by hand", () => {
    const { optics } = built(ONE_FIBRE);
    // P1…P4 at t = −1: −1, 1, −1, 1; at 1: all 1.
    expect(optics.trace[0]).toBeCloseTo(77.3 - 3 + 6 + 0.4 + 0.3, 12);
    expect(optics.trace[89]).toBeCloseTo(77.3 + 3 + 6 - 0.4 + 0.3, 12);
    const odd = built({ ...ONE_FIBRE, detector: ONE_FIBRE.detector.replace("90", "91") }).optics;
    // At 0: 0, −1/2, 0, 3/8.
    expect(odd.trace[45]).toBeCloseTo(77.3 - 3 + (3 / 8) * 0.3, 12);
  });

  test("a shift and a stretch move the light by what they say, upwards when positive", () => {
    const { scene, exposure, optics } = built(ONE_FIBRE);
    const moved = buildOptics(scene, { ...exposure, shift: 0.37, stretch: 2e-3 });
    const { flux } = makeSpectra(scene, exposure, optics);
    const before = spreadFibres(optics, flux);
    const after = spreadFibres(moved, flux);
    for (const x of [0, 30, 89]) {
      const expected = 0.37 + 2e-3 * (optics.trace[x] - 79.5);
      expect(Math.abs(moved.trace[x] - optics.trace[x] - expected)).toBeLessThan(1e-12);
      expect(Math.abs(centroid(after, optics, x) - centroid(before, optics, x) - expected)).toBeLessThan(4e-5);
    }
  });

  test("blocks, pitch and gaps stand where the slit says", () => {
    const { optics } = built({
      slit: "blocks = [2, 3, 1]\npitch = 5\ngap = [7, 2.5]\nfirst = 11\ndead = [4]\nsky = [2]",
    });
    expect(Array.from({ length: 6 }, (_v, k) => optics.trace[k * optics.nx])).toEqual([11, 16, 28, 33, 38, 45.5]);
    expect(Array.from(optics.block)).toEqual([1, 1, 2, 2, 2, 3]);
    expect(optics.lit).toEqual([true, true, true, false, true, true]);
    expect(optics.sky).toEqual([false, true, false, false, false, false]);
  });

  test("strong curvature that leaves the frame is no trouble: what is left of the light is on the frame", () => {
    const { scene, exposure, optics } = built({ ...ONE_FIBRE, rest: ONE_FIBRE.rest.replace("bow = 6", "bow = 120") });
    const image = spreadFibres(optics, makeSpectra(scene, exposure, optics).flux);
    const columnSum = (x: number) => sum(Float64Array.from({ length: optics.ny }, (_v, y) => image[y * optics.nx + x]));
    const flux = makeSpectra(scene, exposure, optics).flux;
    expect(optics.trace[0]).toBeGreaterThan(190);
    expect(columnSum(0) / flux[0]).toBeLessThan(1e-3);
    // Half of the wing's 2 %, beyond the first row's edge: ½ · 0.02 · exp(−distance / 4 px).
    const lost = 0.01 * Math.exp(-(optics.trace[45] + 0.5) / 4);
    expect(Math.abs(1 - columnSum(45) / flux[45] - lost)).toBeLessThan(0.03 * lost);
  });
});

describe("wavelengths and lines", () => {
  test("a column and its wavelength lead to each other", () => {
    const { optics } = built({ ...ONE_FIBRE, rest: `${ONE_FIBRE.rest}\ncurve = 6\ncubic = 1` });
    for (const x of [-3.2, 0, 17.6, 88.9]) {
      expect(Math.abs(columnOf(optics, 0, wavelengthAt(optics, 0, x), 5) - x)).toBeLessThan(1e-9);
    }
    expect(columnOf(optics, 0, 6600, 5)).toBeNaN();
    expect(wavelengthAt(optics, 0, 12)).toBe(optics.wave[12]);
  });

  test("a line's electrons and centroid are the listed ones; a shift along dispersion moves it up", () => {
    // Throughput 1 and dark sky: the one line that the range holds, Hg I 5460.735 Å (NIST, from memory).
    const parts = {
      ...ONE_FIBRE,
      rest: ONE_FIBRE.rest.replace("[6400, 6000]", '[5480, 5440]\nlamps = ["Hg"]'),
      exposures: ONE_FIBRE.exposures.replace("fibre-flat", "arc"),
    };
    const { scene, exposure, optics } = built(parts);
    const [line, ...others] = makeSpectra(scene, exposure, optics).lines;
    expect(others).toEqual([]);
    expect(line.x).toBeCloseTo(((5480 - 5460.735) / 40) * 89, 9);
    for (const dispersion_shift of [0, 0.8]) {
      const moved = { ...exposure, dispersion_shift };
      const { flux } = makeSpectra(scene, moved, buildOptics(scene, moved));
      expect(Math.abs(sum(flux) / line.electrons - 1)).toBeLessThan(1e-12);
      // Poisson's summation formula: exp(−2π²σ²)/π = 1e-8 px for a Gaussian of σ = 0.93 px.
      expect(Math.abs(sum(flux.map((v, x) => v * x)) / sum(flux) - line.x - dispersion_shift)).toBeLessThan(2e-8);
    }
  });

  test("targets span what the scene asks, and faint ones stand beside bright ones", () => {
    const { scene, exposure, optics } = built({
      slit: "blocks = [16]\npitch = 5",
      rest: "[profile]\nfwhm = 2.5\n[wavelength]\nrange = [5500, 6500]\n[science]\ncolour = 0\nabsorption_lines = 0\nemission_share = 0\nseconds = 300",
    });
    const { flux } = makeSpectra(scene, exposure, optics);
    const levels = Array.from({ length: 16 }, (_v, k) => flux[k * optics.nx + 70] / 3);
    const sorted = [...levels].sort((a, b) => a - b);
    // 10 to 1e5 in 300 s, three times that in 900 s, in equal ratios.
    for (const [i, level] of sorted.entries()) expect(level / (10 * 1e4 ** (i / 15))).toBeCloseTo(1, 9);
    const contrast = Math.max(...levels.slice(1).map((level, k) => Math.max(level / levels[k], levels[k] / level)));
    expect(contrast).toBeGreaterThan(100);
  });
});
