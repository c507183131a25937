import { beforeAll, describe, expect, it } from "vitest";
import { fitBackground } from "../../src/extraction/background.js";
import { openFrame } from "../../src/extraction/settle.js";
import { type Kernels, loadKernels } from "../../src/kernels/module.js";
import type { SmoothBackground } from "../../src/reference/extract.js";
import { legendreArgument, legendreBasis } from "../../src/reference/legendre.js";
import { type SimulatedExposure, simulateExposure } from "../../src/simulate/exposure.js";
import { parseScene } from "../../src/simulate/scene.js";
import { SCENES } from "../../src/simulate/scenes.js";
import { chooseProfile } from "../../src/tramlines/profiles.js";
import type { Tramlines } from "../../src/tramlines/tramlines.js";
import { frameFromTruth, tramlinesFromTruth } from "./fromTruth.js";

/** Four blocks with gaps of 22 px, wings of 2 % that reach into all of them, and scattered light. */
const scene = parseScene(
  SCENES.demo
    .replace("size = [1200, 640]", "size = [320, 260]")
    .replace('"[1:600,1:640]"', '"[1:160,1:260]"')
    .replace('"[601:1200,1:640]"', '"[161:320,1:260]"')
    .replace("bad_columns = [287, 911]", "bad_columns = []")
    .replace("blocks = [20, 20, 20, 20, 20]", "blocks = [8, 8, 8, 7]")
    .replace("gap = [17, 16.5, 17, 16.5]", "gap = [17, 16.5, 17]")
    .replace("dead = [8, 41, 77]", "dead = [12]")
    .replace("sky = [3, 16, 27, 38, 49, 58, 69, 83, 96]", "sky = [3]")
    .replace("rate = 180", "rate = 20"),
  "gaps",
);
const readNoise = 3.1;

let kernels: Kernels;
let exposure: SimulatedExposure;
let tramlines: Tramlines;
beforeAll(async () => {
  kernels = await loadKernels();
  const flats = ["fflat_01", "fflat_02"].map((name) => simulateExposure(scene, name));
  const frames = flats.map((flat) => frameFromTruth(flat, readNoise));
  tramlines = (await chooseProfile(frames, tramlinesFromTruth(flats[0]), "empirical")).tramlines;
  exposure = simulateExposure(scene, "sci_01");
});

interface Miss {
  mean: number;
  rms: number;
}

/** A surface less the scattered light that was put in, over the whole frame, e⁻ per pixel. */
function missOf({ nX, nY, coefficients }: SmoothBackground, of = exposure): Miss {
  const { nx, ny, scattered } = of.truth;
  let [sum, squares, n] = [0, 0, 0];
  for (let y = 2; y < ny; y += 5) {
    const inY = legendreBasis(legendreArgument(y, ny), nY);
    for (let x = 2; x < nx; x += 7) {
      const inX = legendreBasis(legendreArgument(x, nx), nX);
      let value = -scattered[y * nx + x];
      for (let i = 0; i < nX; i++) for (let j = 0; j < nY; j++) value += coefficients[i * nY + j] * inX[i] * inY[j];
      sum += value;
      squares += value * value;
      n++;
    }
  }
  return { mean: sum / n, rms: Math.sqrt(squares / n) };
}

describe("background in turns with the fibres", () => {
  it("comes within 2.5 e⁻ of 40 on the average, 4 e⁻ rms; a look at the gaps alone holds the wings too", () => {
    const frame = frameFromTruth(exposure, readNoise);
    const { scattered } = exposure.truth;
    expect(scattered.reduce((sum, value) => sum + value, 0) / scattered.length).toBeGreaterThan(35);
    const gaps = missOf(fitBackground(frame, tramlines));
    const settled = missOf(openFrame(kernels, frame, tramlines, {}).background!);
    expect(gaps.mean).toBeGreaterThan(4);
    // Of the wings' light some 2 e⁻ stay: so well does the flat tell wings from scattered light.
    expect(Math.abs(settled.mean)).toBeLessThan(2.5);
    expect(settled.rms).toBeLessThan(4);
  });

  it("is the scattered light to 0.5 e⁻ on the average, 0.8 rms, when the profile holds all of the wings", () => {
    const clean = parseScene(
      SCENES.clean.replace("clean = true\n", "").replace("[light]", "[light]\nscattered_share = 0.03"),
      "scattered",
    );
    const bare = simulateExposure(clean, "sci_01");
    const [frame, lines] = [frameFromTruth(bare, 3), tramlinesFromTruth(bare)];
    const { background } = openFrame(kernels, frame, lines, {});
    const miss = missOf(background!, bare);
    expect(Math.abs(miss.mean)).toBeLessThan(0.5);
    expect(miss.rms).toBeLessThan(0.8);
    // Quoted is the mean over noise alone of what happened here once, orders that are lacking come on top.
    expect(miss.rms / background!.error).toBeGreaterThan(0.6);
    expect(miss.rms / background!.error).toBeLessThan(1.6);
  });

  it("is none when none is asked for, and the profile's error is told all the same", () => {
    const frame = frameFromTruth(exposure, readNoise);
    const { background, profileError } = openFrame(kernels, frame, tramlines, { background: false });
    expect(background).toBeNull();
    // Scattered light that is not taken off is a misfit too.
    expect(profileError).toBeGreaterThan(2 * openFrame(kernels, frame, tramlines, {}).profileError);
  });

  it("leaves nothing behind: no rejection, and spectra as if nothing had been run", () => {
    const frame = frameFromTruth(exposure, readNoise);
    const { bench } = openFrame(kernels, frame, tramlines, {});
    expect(bench.rejected.reduce((sum, bits) => sum + bits, 0)).toBe(0);
  });

  it("is the same whether or not cosmic rays fell into the gaps", () => {
    const frame = frameFromTruth(exposure, readNoise);
    const clean = openFrame(kernels, frame, tramlines, {}).background!;
    const hit = { ...frame, electrons: frame.electrons.slice() };
    for (let i = 0; i < 200; i++) hit.electrons[(1 + ((i * 71) % 256)) * 320 + ((i * 113) % 320)] += 2000 + 90 * i;
    const after = openFrame(kernels, hit, tramlines, {}).background!;
    expect(after.coefficients.length).toBe(clean.coefficients.length);
    after.coefficients.forEach((c, i) => {
      expect(Math.abs(c - clean.coefficients[i])).toBeLessThan(1);
    });
  });

  it("refuses tramlines that cross", () => {
    const crossing = { ...tramlines, legendre: tramlines.legendre.slice() };
    crossing.legendre[crossing.degree + 1] -= 30;
    expect(() => openFrame(kernels, frameFromTruth(exposure, readNoise), crossing, {})).toThrow(
      "Two tramlines cross; the fibres' order along y must be that of the slit.",
    );
  });
});
