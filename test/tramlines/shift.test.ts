import { beforeAll, describe, expect, it } from "vitest";
import { fitBackground, noBackground } from "../../src/extraction/background.js";
import { type Kernels, loadKernels } from "../../src/kernels/module.js";
import { legendreArgument, legendreValue } from "../../src/reference/legendre.js";
import { type SimulatedExposure, simulateExposure } from "../../src/simulate/exposure.js";
import { parseScene, type Scene, type SceneExposure } from "../../src/simulate/scene.js";
import { SCENES } from "../../src/simulate/scenes.js";
import { chooseProfile } from "../../src/tramlines/profiles.js";
import { measureShift, type Shift, shiftAt, shiftTramlines } from "../../src/tramlines/shift.js";
import type { Tramlines } from "../../src/tramlines/tramlines.js";
import { frameFromTruth, tramlinesFromTruth } from "../extraction/fromTruth.js";
import { benchScene, frameOf } from "./shape/bench.js";

let kernels: Kernels;
beforeAll(async () => {
  kernels = await loadKernels();
});

const nScene = 40;

/** 28 pure Gaussians on 160 × 200 pixels; the seed changes light, lines and noise alike. */
function cleanScene(seed: number, change: (text: string) => string = (text) => text): Scene {
  const text = SCENES.clean
    .replace("seed = 7", `seed = ${seed}`)
    .replace("size = [400, 330]", "size = [160, 200]")
    .replace("blocks = [20, 20, 20]", "blocks = [10, 10, 9]")
    .replace("gap = 6", "gap = [12, 12.5]");
  return parseScene(change(text), "clean");
}

/** Light moved by `shift` pixels and stretched by `stretch` per pixel from the middle row. */
function moved(name: string, shift: number, stretch: number, cosmicRays = false): SceneExposure {
  return {
    ...{ name, kind: "science", seconds: 900, brightness: 1, dispersion_shift: 0 },
    ...{ shift, stretch, cosmic_rays: cosmicRays },
  } as SceneExposure;
}

/** c₀, c₁, c₂ of a move: at y ∈ [−1, 1] from the middle it is shift + stretch · y · (ny − 1)/2. */
function wanted(shift: number, stretch: number, ny: number): [number, number, number] {
  return [shift, 0, (stretch * (ny - 1)) / 2];
}

interface Sample {
  pulls: number[][];
  errors: number[][];
  misses: number[][];
}

function sample(n: number, measure: (i: number) => { found: Shift | null; truth: [number, number, number] }): Sample {
  const all: Sample = { pulls: [[], [], []], errors: [[], [], []], misses: [[], [], []] };
  for (let i = 0; i < n; i++) {
    const { found, truth } = measure(i);
    expect(found).not.toBeNull();
    truth.forEach((value, term) => {
      const miss = found!.coefficients[term] - value;
      all.pulls[term].push(miss / found!.errors[term]);
      all.errors[term].push(found!.errors[term]);
      all.misses[term].push(miss);
    });
  }
  return all;
}

const mean = (values: number[]) => values.reduce((sum, value) => sum + value, 0) / values.length;
const deviation = (values: number[]) =>
  Math.sqrt(values.reduce((sum, value) => sum + (value - mean(values)) ** 2, 0) / (values.length - 1));

/** The standard deviation of 40 pulls is itself known to 1/√78 = 11 %, of three terms together to 7 %. */
function expectHonest({ pulls }: Sample): void {
  const all = pulls.flatMap((term) => term.map((pull) => pull - mean(term)));
  expect(Math.abs(deviation(all) - 1)).toBeLessThan(0.25);
  for (const term of pulls) {
    expect(Math.abs(deviation(term) - 1)).toBeLessThan(0.45);
    expect(Math.abs(mean(term))).toBeLessThan(4 / Math.sqrt(term.length));
  }
}

/** Errors in pixels: below `most`, yet not below what photons allow. */
function expectErrors({ errors }: Sample, most: number): void {
  for (const term of errors) {
    expect(mean(term)).toBeLessThan(most);
    expect(mean(term)).toBeGreaterThan(1e-4);
  }
}

describe("shift of a frame against its tramlines, pure Gaussians", () => {
  for (const size of [0.3, 1.5]) {
    it(`finds ${size} px up or down with a stretch within its quoted error, on ${nScene} scenes`, () => {
      const found = sample(nScene, (i) => {
        const scene = cleanScene(100 + i);
        const [shift, stretch] = i % 2 === 0 ? [size, 1e-3] : [-size, -7e-4];
        const flat = simulateExposure(scene, "fflat_01");
        const exposure = simulateExposure(scene, moved("sci", shift, stretch));
        const frame = frameFromTruth(exposure, 3);
        const measured = measureShift(kernels, frame, tramlinesFromTruth(flat), noBackground());
        return { found: measured, truth: wanted(shift, stretch, frame.ny) };
      });
      expectHonest(found);
      expectErrors(found, 1e-3);
    });
  }

  it("finds it by a tenth of the fibres, the others holding 2 e⁻ a column", () => {
    const levels = Array.from({ length: 29 }, (_, k) => (k % 10 === 4 ? 8000 : 2));
    const found = sample(nScene, (i) => {
      const scene = cleanScene(200 + i, (text) =>
        text.replace("faintest = 10", `levels = [${levels}]\nemission_share = 0\nfaintest = 10`),
      );
      const flat = simulateExposure(scene, "fflat_01");
      const frame = frameFromTruth(simulateExposure(scene, moved("sci", 0.3, 1e-3)), 3);
      const measured = measureShift(kernels, frame, tramlinesFromTruth(flat), noBackground());
      return { found: measured, truth: wanted(0.3, 1e-3, frame.ny) };
    });
    expectHonest(found);
    expectErrors(found, 4e-3);
  });

  it("finds it through cosmic rays that nobody rejected", () => {
    const found = sample(nScene, (i) => {
      const scene = parseScene(
        SCENES.demo
          .replace("seed = 41", `seed = ${300 + i}`)
          .replace("size = [1200, 640]", "size = [160, 200]")
          .replace('"[1:600,1:640]"', '"[1:80,1:200]"')
          .replace('"[601:1200,1:640]"', '"[81:160,1:200]"')
          .replace("bad_columns = [287, 911]", "bad_columns = []")
          .replace("blocks = [20, 20, 20, 20, 20]", "blocks = [10, 10, 9]")
          .replace("gap = [17, 16.5, 17, 16.5]", "gap = [12, 12.5]")
          .replace("dead = [8, 41, 77]", "dead = [8]")
          .replace("sky = [3, 16, 27, 38, 49, 58, 69, 83, 96]", "sky = [3]")
          .replace("second_share = 0.14", "second_share = 0")
          .replace("wing_share = 0.02", "wing_share = 0")
          .replace("scattered_share = 0.03", "scattered_share = 0")
          .replace("rate = 180", "rate = 15"), // twice the demo's for so many pixels
        "rays",
      );
      const flat = simulateExposure(scene, "fflat_01");
      const frame = frameFromTruth(simulateExposure(scene, moved("sci", -0.3, 5e-4, true)), 3.1);
      const measured = measureShift(kernels, frame, tramlinesFromTruth(flat), noBackground());
      return { found: measured, truth: wanted(-0.3, 5e-4, frame.ny) };
    });
    expectHonest(found);
    expectErrors(found, 1.5e-3);
  });
});

describe("shift with a profile measured from the flat", () => {
  for (const [shift, stretch] of [
    [0.3, 1e-3],
    [-1.5, -1e-3],
  ]) {
    it(`finds ${shift} px within its quoted error on 40 exposures, and the flat's own error once: under 0.003 px`, async () => {
      const scene = benchScene();
      const flats = ["fflat_01", "fflat_02"].map((name) => simulateExposure(scene, name));
      const { tramlines } = await chooseProfile(flats.map(frameOf), tramlinesFromTruth(flats[0]), "empirical");
      const found = sample(40, (i) => {
        const frame = frameOf(simulateExposure(scene, moved(`n${i}`, shift, stretch, true)));
        return {
          found: measureShift(kernels, frame, tramlines, fitBackground(frame, tramlines)),
          truth: wanted(shift, stretch, frame.ny),
        };
      });
      const all = found.pulls.flatMap((term) => term.map((pull) => pull - mean(term)));
      expect(Math.abs(deviation(all) - 1)).toBeLessThan(0.25);
      for (const term of found.misses) expect(Math.abs(mean(term))).toBeLessThan(0.003);
      expectErrors(found, 1.5e-3);
    });
  }
});

describe("a shift", () => {
  const shift: Shift = { coefficients: [0.4, -0.07, 0.25], errors: [0, 0, 0], nPoint: 99, rms: 0 };
  let exposure: SimulatedExposure;
  let tramlines: Tramlines;
  beforeAll(() => {
    exposure = simulateExposure(cleanScene(1), "fflat_01");
    tramlines = tramlinesFromTruth(exposure);
  });

  it("moves every line by its surface, dead fibres' too, and leaves the given ones alone", () => {
    const before = tramlines.legendre.slice();
    const after = shiftTramlines(tramlines, shift);
    const { nFibre, nx, ny, degree } = tramlines;
    for (let k = 0; k < nFibre; k++) {
      for (const x of [0, 50, 159]) {
        const t = legendreArgument(x, nx);
        const y = legendreValue(before, t, k * (degree + 1), degree + 1);
        const now = legendreValue(after.legendre, t, k * (degree + 1), degree + 1);
        expect(Math.abs(now - y - shiftAt(shift, x, y, nx, ny))).toBeLessThan(1e-12);
        // By hand: 0.4 − 0.07·(2x/159 − 1) + 0.25·(2y/199 − 1).
        const byHand = 0.4 - 0.07 * ((2 * x) / 159 - 1) + 0.25 * ((2 * y) / 199 - 1);
        expect(Math.abs(now - y - byHand)).toBeLessThan(1e-12);
      }
    }
    expect([...tramlines.legendre]).toEqual([...before]);
  });

  it("cannot be told without light, nor from a frame all of bad pixels: null", () => {
    const frame = frameFromTruth(exposure, 3);
    const dark = { ...frame, electrons: frame.electrons.map((_, i) => 3 * Math.sin(17 * i)) };
    expect(measureShift(kernels, dark, tramlines, noBackground())).toBeNull();
    const bad = { ...frame, mask: new Uint8Array(frame.mask.length).fill(1) };
    expect(measureShift(kernels, bad, tramlines, noBackground())).toBeNull();
  });

  it("is measured where pixels are missing (NaN, masked), as well as elsewhere", () => {
    const frame = frameFromTruth(simulateExposure(cleanScene(1), moved("sci", 0.3, 0)), 3);
    for (let x = 20; x < 60; x++) {
      for (let y = 30; y < 90; y++) {
        frame.electrons[y * 160 + x] = Number.NaN;
        frame.mask[y * 160 + x] = 1;
      }
    }
    const found = measureShift(kernels, frame, tramlines, noBackground());
    expect(Math.abs(found!.coefficients[0] - 0.3)).toBeLessThan(5 * found!.errors[0]);
  });
});
