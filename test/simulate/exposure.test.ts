import { describe, expect, test } from "vitest";
import { cosmicRayImage } from "../../src/simulate/cosmicRays.js";
import { simulateExposure } from "../../src/simulate/exposure.js";
import { parseScene } from "../../src/simulate/scene.js";
import { SCENES } from "../../src/simulate/scenes.js";
import { chiSquareScore, EVERYTHING, smallScene, sum } from "./benches.js";

const CLEAN = parseScene(SCENES.clean, "clean");

describe("electrons", () => {
  test("every column of a clean frame holds what its fibres brought", () => {
    const { truth } = simulateExposure(CLEAN, "sci_01");
    const expected = truth.expectedElectrons();
    for (let x = 0; x < truth.nx; x++) {
      let image = 0;
      let fibres = 0;
      for (let y = 0; y < truth.ny; y++) image += expected[y * truth.nx + x];
      for (let k = 0; k < truth.nFibre; k++) fibres += truth.flux[k * truth.nx + x];
      expect(Math.abs(image / fibres - 1)).toBeLessThan(1e-12);
    }
  });

  test("a pixel is the sum of its fibres' true profiles, scattered light, response and dark", () => {
    const { truth } = simulateExposure(smallScene(EVERYTHING), "sci_01");
    const expected = truth.expectedElectrons();
    for (const [x, y] of [
      [3, 20],
      [77, 60],
      [149, 101],
    ]) {
      let light = truth.scattered[y * truth.nx + x];
      for (let k = 0; k < truth.nFibre; k++) light += truth.flux[k * truth.nx + x] * truth.truthProfile(k, x, y, 1)[0];
      const pixel = truth.response[y * truth.nx + x] * light + 0.02 * 900;
      expect(Math.abs(expected[y * truth.nx + x] / pixel - 1)).toBeLessThan(1e-12);
    }
    expect(truth.flux[2 * truth.nx]).toBeGreaterThan(0);
  });

  test("scattered light is its share of all the light, and smooth", () => {
    const { truth } = simulateExposure(smallScene(EVERYTHING), "fflat_01");
    // 1e-3: the wings' light beyond the frame scatters nothing.
    expect(Math.abs(sum(truth.scattered) / (0.05 * sum(truth.flux)) - 1)).toBeLessThan(1e-3);
    const mean = sum(truth.scattered) / truth.scattered.length;
    for (let i = truth.nx; i < truth.scattered.length; i++) {
      expect(Math.abs(truth.scattered[i] - truth.scattered[i - truth.nx])).toBeLessThan(0.05 * mean);
    }
  });

  test("a dead fibre brings nothing, and its neighbours' wings still cross it", () => {
    const { truth } = simulateExposure(CLEAN, "sci_01");
    expect(truth.lit[10]).toBe(false);
    expect(sum(truth.flux.subarray(10 * truth.nx, 11 * truth.nx))).toBe(0);
    expect(truth.expectedElectrons()[Math.round(truth.trace[10 * truth.nx]) * truth.nx]).toBeGreaterThan(0);
  });
});

describe("noise", () => {
  test.each(["fflat_01", "sci_01"])("%s of a clean scene strays from the mean by Poisson and read noise", (name) => {
    const { truth } = simulateExposure(CLEAN, name);
    const expected = truth.expectedElectrons();
    const corrected = truth.correctedElectrons();
    let nTested = 0;
    for (const [low, high] of [
      [0, 1],
      [1, 30],
      [30, 1000],
      [1000, 1e6],
    ]) {
      let [chiSquare, n, pull] = [0, 0, 0];
      expected.forEach((mean, i) => {
        if (mean < low || mean >= high) return;
        // Read noise of 3 e⁻, rounding of the converter (uniform: 1/12 ADU², at 1.1 e⁻/ADU).
        const variance = mean + 9 + 1.21 / 12;
        chiSquare += (corrected[i] - mean) ** 2 / variance;
        pull += (corrected[i] - mean) / Math.sqrt(variance);
        n++;
      });
      if (n < 500) continue;
      nTested++;
      expect(Math.abs(chiSquareScore(chiSquare, n)), `${low} to ${high} e⁻`).toBeLessThan(4.4);
      expect(Math.abs(pull) / Math.sqrt(n), `${low} to ${high} e⁻`).toBeLessThan(4.4);
    }
    expect(nTested).toBe(4);
  });

  test("with four amplifiers, drift, pattern, dark and response, turned: a perfect correction gives back the light", () => {
    const scene = smallScene(EVERYTHING);
    const { truth } = simulateExposure(scene, { ...scene.exposure[2], cosmic_rays: false });
    const corrected = truth.correctedElectrons();
    const expected = truth.expectedElectrons();
    let [chiSquare, n] = [0, 0];
    for (let y = 0; y < truth.ny; y++) {
      for (let x = 0; x < truth.nx; x++) {
        const i = y * truth.nx + x;
        if (truth.bad[i] || truth.saturated[i]) continue;
        // Dispersion along FITS axis 2: amplifiers share y up to 61 (axis 1) and x up to 75 (axis 2).
        const a = (y < 61 ? 0 : 1) + (x < 75 ? 0 : 2);
        const [gain, readNoise] = [[1.1, 1.4, 0.9, 1.7][a], [3, 5, 2, 4][a]];
        const r = truth.response[i];
        const variance = (expected[i] + readNoise ** 2 + gain ** 2 / 12) / r ** 2;
        chiSquare += (corrected[i] - (expected[i] - 0.02 * 900) / r) ** 2 / variance;
        n++;
      }
    }
    expect(n).toBeGreaterThan(15_000);
    expect(Math.abs(chiSquareScore(chiSquare, n))).toBeLessThan(4.4);
  });

  test("the response has the rms that the scene asks", () => {
    const { truth } = simulateExposure(smallScene(EVERYTHING), "bias_01");
    const good = truth.response.filter((_r, i) => !truth.bad[i]);
    const chiSquare = sum(good.map((r) => ((r - 1) / 0.01) ** 2));
    expect(Math.abs(chiSquareScore(chiSquare, good.length))).toBeLessThan(4.4);
  });
});

describe("kinds of exposure", () => {
  const lamps = smallScene({
    ...EVERYTHING,
    exposures: ["bias", "dark", "detector-flat", "twilight", "arc"]
      .map((kind) => `[[exposure]]\nname = "${kind}_01"\nkind = "${kind}"${kind === "bias" ? "" : "\nseconds = 40"}`)
      .join("\n"),
  });

  test("a bias is dark, a dark holds its dark current, a detector flat its level times the response", () => {
    expect(
      sum(
        simulateExposure(lamps, "bias_01")
          .truth.expectedElectrons()
          .filter((_v, i) => i < 150 * 30),
      ),
    ).toBe(0);
    expect(simulateExposure(lamps, "dark_01").truth.expectedElectrons()[7]).toBe(0.02 * 40);
    const { truth } = simulateExposure(lamps, "detector-flat_01");
    // The first pixel is a corner, t = −1 twice: 1 − 0.04 − 0.03 − 0.02.
    const corner = truth.response[0] * 1500 * 40 * 0.91 + 0.02 * 40;
    expect(truth.expectedElectrons()[0] / corner).toBeCloseTo(1, 12);
    expect(sum(truth.flux)).toBe(0);
  });

  test("a twilight has the same dips in every fibre, at the same wavelength", () => {
    const { truth } = simulateExposure(lamps, "twilight_01");
    const spectrum = (k: number, x: number) => truth.flux[k * truth.nx + x] / truth.throughput[k * truth.nx + x];
    for (let x = 0; x < truth.nx; x++) expect(spectrum(3, x) / spectrum(12, x)).toBeCloseTo(1, 9);
    const levels = Array.from({ length: truth.nx }, (_v, x) => spectrum(3, x));
    expect(Math.min(...levels) / Math.max(...levels)).toBeLessThan(0.8);
  });

  test("an arc has its lamps' lines in every lit fibre, each as bright as its throughput", () => {
    const { truth } = simulateExposure(lamps, "arc_01");
    // Between 6200 and 7200 Å: 13 of neon from 6217.281 to 7032.413, 3 of argon from 6965.431 to 7147.042.
    const inner = truth.lines.filter(({ wavelength }) => wavelength > 6210 && wavelength < 7190);
    expect(inner.length).toBe((13 + 3) * 16);
    const hits = truth.lines.filter(({ wavelength }) => wavelength === 6678.276);
    const bare = hits.map(({ fibre, x, electrons }) => electrons / truth.throughput[fibre * truth.nx + Math.round(x)]);
    for (const value of bare) expect(value / bare[0]).toBeCloseTo(1, 12);
  });
});

describe("readout", () => {
  test("the overscan stands at the bias level with the read noise, and the sections do not overlap", () => {
    const { raw, cards } = simulateExposure(CLEAN, "sci_01");
    const of = (keyword: string) => cards.find((card) => card.keyword === keyword)?.value;
    expect([raw.n1, raw.n2, of("DATASEC1"), of("BIASSEC1"), of("CCDSEC1")]).toEqual([
      424,
      330,
      "[25:424,1:330]",
      "[1:24,1:330]",
      "[1:400,1:330]",
    ]);
    const overscan = Float64Array.from(
      { length: 24 * 330 },
      (_v, i) => raw.adu[Math.floor(i / 24) * 424 + (i % 24)] - 1000,
    );
    const variance = (3 / 1.1) ** 2 + 1 / 12;
    expect(Math.abs(sum(overscan)) / Math.sqrt(variance * overscan.length)).toBeLessThan(4.4);
    expect(Math.abs(chiSquareScore(sum(overscan.map((v) => v * v)) / variance, overscan.length))).toBeLessThan(4.4);
  });

  test("the converter clips at saturation, and the truth says where", () => {
    const scene = smallScene({
      rest: "[profile]\nfwhm = 2.5\n[wavelength]\nrange = [5500, 6500]\n[science]\nlevels = [50, 4e5]",
    });
    const { raw, truth } = simulateExposure(scene, "sci_01");
    let differing = 0;
    truth.saturated.forEach((flag, i) => {
      const adu = raw.adu[Math.floor(i / 150) * raw.n1 + 20 + (i % 150)];
      if ((adu === 65535) !== (flag === 1)) differing++;
    });
    expect(differing).toBe(0);
    expect(sum(truth.saturated)).toBeGreaterThan(1000);
  });

  test("a column called bad is bad, and lies along FITS axis 2", () => {
    const { truth } = simulateExposure(smallScene(EVERYTHING), "fflat_01");
    // Column 31 of a file whose axis 2 is dispersion: row 30.
    truth.bad.forEach((flag, i) => {
      expect(flag).toBe(Math.floor(i / truth.nx) === 30 ? 1 : 0);
    });
    expect(truth.response[30 * truth.nx + 5]).toBeLessThan(0.4);
  });
});

describe("cosmic rays", () => {
  test("they are where the truth says, and nothing else changes when they are left out", () => {
    const scene = smallScene(EVERYTHING);
    const noisy = { ...scene.exposure[2] };
    const quiet = { ...noisy, cosmic_rays: false };
    const withRays = simulateExposure(scene, noisy);
    const without = simulateExposure(scene, quiet);
    const { truth } = withRays;
    const quietElectrons = without.truth.correctedElectrons();
    let hit = 0;
    withRays.truth.correctedElectrons().forEach((electrons, i) => {
      const difference = (electrons - quietElectrons[i]) * truth.response[i];
      if (truth.cosmicRays[i] === 0) expect(difference).toBe(0);
      else if (!truth.saturated[i]) {
        hit++;
        // Two roundings of at most half an ADU of at most 1.7 e⁻.
        expect(Math.abs(difference - truth.cosmicRays[i])).toBeLessThan(1.71);
      }
    });
    expect(hit).toBeGreaterThan(50);
    expect(sum(without.truth.cosmicRays)).toBe(0);
  });
});

describe("charge of cosmic rays", () => {
  test("as many and as strong as the scene asks", () => {
    const scene = smallScene({ ...EVERYTHING, rest: EVERYTHING.rest.replace("rate = 40", "rate = 20000") });
    const total = sum(cosmicRayImage(scene, scene.exposure[2], 700, 650));
    // 930 s; 2000 e⁻ in the median, and the mean of a log-normal with σ = 0.7 is exp(0.245) times that.
    const expected = 20_000 * 0.93 * 2000 * Math.exp(0.245);
    // 18 600 hits with a relative scatter of about 1.1 (log-normal 0.8, length 0.5): 4.4 σ is 3.6 %. About 1 % leaves the frame.
    expect(total / expected).toBeGreaterThan(0.95);
    expect(total / expected).toBeLessThan(1.035);
  });
});

describe("seeds", () => {
  const bytes = (seed: number, name: string) =>
    Buffer.from(simulateExposure(smallScene({ ...EVERYTHING, seed }), name).raw.adu.buffer);

  test("the same seed gives the same bytes, another seed or another exposure others", () => {
    expect(bytes(3, "sci_01").equals(bytes(3, "sci_01"))).toBe(true);
    expect(bytes(3, "sci_01").equals(bytes(4, "sci_01"))).toBe(false);
    const scene = smallScene(EVERYTHING);
    const again = simulateExposure(scene, { ...scene.exposure[1], name: "fflat_02" });
    expect(Buffer.from(again.raw.adu.buffer).equals(bytes(3, "fflat_01"))).toBe(false);
    expect(Array.from(again.truth.flux)).toEqual(Array.from(simulateExposure(scene, "fflat_01").truth.flux));
  });

  test("leaving out scattered light moves neither cosmic rays nor the read noise", () => {
    const dark = smallScene({ ...EVERYTHING, rest: EVERYTHING.rest.replace("scattered_share = 0.05", "") });
    const one = simulateExposure(smallScene(EVERYTHING), "sci_01");
    const other = simulateExposure(dark, "sci_01");
    expect(Array.from(other.truth.cosmicRays)).toEqual(Array.from(one.truth.cosmicRays));
    const overscanRow = (adu: Uint16Array) => Array.from(adu.subarray(0, 12));
    expect(overscanRow(other.raw.adu)).toEqual(overscanRow(one.raw.adu));
    expect(sum(other.truth.scattered)).toBe(0);
  });

  test("an exposure that the scene does not have is refused with those it has", () => {
    expect(() => simulateExposure(CLEAN, "sci_09")).toThrow(
      "clean bench: no exposure is called sci_09; the scene has fflat_01, sci_01",
    );
  });
});
