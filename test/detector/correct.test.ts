/** The whole equation e = [gain·(ADU − overscan − bias) − dark·t] / r against frames made by it, with its variance. */
import { describe, expect, it } from "vitest";
import { makeCalibrations, noCalibrations } from "../../src/detector/calibrations.js";
import { correctFrame } from "../../src/detector/correct.js";
import { type Frame, MaskBit } from "../../src/detector/frame.js";
import type { RawImage } from "../../src/detector/raw.js";
import { normalDeviate, poissonDeviate } from "../scene.js";
import { type Cards, momentsOf, rawFrame, seeded } from "./rawFrames.js";

const NX = 120;
const NY = 96;
const GAINS = [1.3, 1.9, 0.8, 2.3];
const NOISES = [3.1, 5.2, 2.4, 6.0];

/** Detector truth in the assembled frame: bias structure (ADU), dark (e⁻/s), response. */
const biasAdu = (x: number, y: number) => 4 * Math.exp(-x / 9) + 0.02 * y;
const darkRate = (x: number, y: number) => 0.004 + ((x * 7 + y * 13) % 97 === 0 ? 0.9 : 0);
const response = (x: number, y: number) =>
  1 + 0.012 * Math.sin(12.9 * x + 78.2 * y) + 0.004 * Math.cos(3.1 * x - 5 * y);
const illumination = (x: number, y: number) => 1 - 0.1 * ((x - 40) / NX) ** 2 + 0.05 * (y / NY);
const light = (x: number, y: number) => 30 + 900 * Math.max(0, Math.sin(y / 1.7)) * (1 + x / NX);

interface Layout {
  cards: Cards;
  nx: number;
  ny: number;
  /** Amplifier and assembled place of a file pixel; undefined in overscan. */
  placeOf: (fx: number, fy: number) => { amplifier: number; x: number; y: number } | undefined;
  /** Amplifier whose overscan a file pixel is. */
  overscanOf: (fx: number, fy: number) => number;
}

/** Four quadrants, overscan of 16 columns at both sides: [os | left | right | os], rows 1–40 and 41–96. */
function quadrants(): Layout {
  const cards: Cards = { NAMPS: 4, SATURATE: 65535, DISPAXIS: 1 };
  const add = (n: number, data: string, overscan: string, place: string) =>
    Object.assign(cards, {
      [`GAIN${n}`]: GAINS[n - 1],
      [`RDNOISE${n}`]: NOISES[n - 1],
      [`DATASEC${n}`]: data,
      [`BIASSEC${n}`]: overscan,
      [`CCDSEC${n}`]: place,
    });
  add(1, "[17:66,1:40]", "[1:16,1:40]", "[1:50,1:40]");
  add(2, "[67:136,1:40]", "[137:152,1:40]", "[51:120,1:40]");
  add(3, "[17:66,41:96]", "[1:16,41:96]", "[1:50,41:96]");
  add(4, "[67:136,41:96]", "[137:152,41:96]", "[51:120,41:96]");
  const half = (fx: number, fy: number) => (fx < 66 ? 0 : 1) + (fy < 40 ? 0 : 2);
  return {
    cards,
    nx: 152,
    ny: NY,
    placeOf: (fx, fy) => (fx >= 16 && fx < 136 ? { amplifier: half(fx, fy), x: fx - 16, y: fy } : undefined),
    overscanOf: half,
  };
}

interface Exposure {
  name: string;
  kind: string;
  seconds: number;
  electrons: (x: number, y: number) => number;
  noise?: boolean;
  /** Bias and dark differ from pixel to pixel, by 3 ADU and 0.012 e⁻/s rms. */
  rough?: boolean | "bias";
}

/** A pattern without rows, columns or slopes: white, rms 1, from −√3 to √3. */
const pattern = (x: number, y: number, seed: number) => {
  const wave = Math.sin(12.9898 * x + 78.233 * y + seed) * 43758.5453;
  return Math.sqrt(12) * (wave - Math.floor(wave) - 0.5);
};

/** Forward model: electrons × response + dark, Poisson, read noise, gain, bias structure, drifting level, whole counts. */
function expose(layout: Layout, exposure: Exposure, seed: number, drift = 1): RawImage {
  const next = seeded(seed);
  const { name, kind, seconds, electrons, noise = true, rough = false } = exposure;
  const cards = { ...layout.cards, IMAGETYP: kind, EXPTIME: seconds };
  return rawFrame(name, layout.nx, layout.ny, cards, (fx, fy) => {
    const place = layout.placeOf(fx, fy);
    const amplifier = place?.amplifier ?? layout.overscanOf(fx, fy);
    const level = 1000 + 40 * amplifier + drift * 3 * Math.sin(fy / 25 + seed + amplifier);
    const mean = place
      ? electrons(place.x, place.y) * response(place.x, place.y) + darkRate(place.x, place.y) * seconds
      : 0;
    const roughDark = place && rough === true ? 0.06 * (1 + 0.2 * pattern(place.x, place.y, 1)) * seconds : 0;
    const structure = place ? biasAdu(place.x, place.y) + (rough ? 3 * pattern(place.x, place.y, 2) : 0) : 0;
    if (!noise) return level + structure + mean / GAINS[amplifier];
    const counts = poissonDeviate(mean + roughDark, next) + NOISES[amplifier] * normalDeviate(next);
    return Math.round(level + structure + counts / GAINS[amplifier]);
  });
}

/** (e − truth) / σ of good pixels, σ² = fixed + m/r + σ_r²·m², each row's band from the table when there is no image. */
function pullsOf(frame: Frame, truth: (x: number, y: number) => number): number[] {
  const { noise, nx } = frame;
  const pulls: number[] = [];
  frame.electrons.forEach((value, at) => {
    if (frame.mask[at] !== 0) return;
    const x = at % nx;
    const y = Math.floor(at / nx);
    const m = truth(x, y);
    const fixed = noise.fixedVarianceImage?.[at] ?? noise.fixedVariance[noise.bandOfRow[y] * nx + x];
    const v = fixed + m * (noise.inverseResponse?.[at] ?? 1) + (noise.responseRelativeVariance?.[at] ?? 0) * m * m;
    pulls.push((value - m) / Math.sqrt(v));
  });
  return pulls;
}

const LAYOUT = quadrants();
const SKY: Exposure = { name: "sci.fits", kind: "object", seconds: 1500, electrons: light };
const biasFrames = (n: number, seed = 100, rough: Exposure["rough"] = false) =>
  Array.from({ length: n }, (_, i) =>
    expose(LAYOUT, { name: `bias${i}.fits`, kind: "bias", seconds: 0, electrons: () => 0, rough }, seed + i),
  );
const darkFrames = (n: number, seconds: number, seed = 200, rough: Exposure["rough"] = false) =>
  Array.from({ length: n }, (_, i) =>
    expose(LAYOUT, { name: `dark${i}.fits`, kind: "dark", seconds, electrons: () => 0, rough }, seed + i),
  );
const flatFrames = (n: number, seed = 300) =>
  Array.from({ length: n }, (_, i) => {
    const level = 28000 + 2500 * i;
    const electrons = (x: number, y: number) => level * illumination(x, y);
    return expose(LAYOUT, { name: `flat${i}.fits`, kind: "flat", seconds: 4, electrons }, seed + i);
  });

describe("one frame through the whole equation", () => {
  it("comes back to its electrons, four amplifiers, all calibrations, each with pulls of 1", async () => {
    const calibrations = await makeCalibrations({
      bias: biasFrames(5),
      dark: darkFrames(3, 1800),
      pixelFlat: flatFrames(4),
    });
    expect(calibrations.warnings).toEqual([]);
    const frame = correctFrame(expose(LAYOUT, SKY, 7), calibrations);
    expect([frame.nx, frame.ny]).toEqual([NX, NY]);
    expect(frame.warnings).toEqual([]);
    // The flat's large-scale shape is taken out of r, so light comes back relative to a smooth response of 1.
    const pulls = pullsOf(frame, light);
    const { mean, sigma, n } = momentsOf(pulls);
    expect(n).toBe(NX * NY);
    expect(Math.abs(mean)).toBeLessThan(5 / Math.sqrt(n));
    expect(Math.abs(sigma - 1)).toBeLessThan(4 / Math.sqrt(2 * n) + 0.01);
    const quadrant = (x: number, y: number) => (x < 50 ? 0 : 1) + (y < 40 ? 0 : 2);
    for (let k = 0; k < 4; k++) {
      const own = pulls.filter((_, at) => quadrant(at % NX, Math.floor(at / NX)) === k);
      expect(Math.abs(momentsOf(own).sigma - 1)).toBeLessThan(5 / Math.sqrt(2 * own.length) + 0.015);
    }
  });

  it("without a pixel flat each pixel's response shows: the calibration is not a formality", async () => {
    const calibrations = await makeCalibrations({ bias: biasFrames(5), dark: darkFrames(3, 1800) });
    const frame = correctFrame(expose(LAYOUT, { ...SKY, electrons: () => 20000 }, 7), calibrations);
    expect(momentsOf(pullsOf(frame, () => 20000)).sigma).toBeGreaterThan(1.4);
    expect(frame.assumptions).toContain("sci.fits: no pixel flats, so all pixels are taken to respond alike.");
  });

  it("counts the bias stack's variance once though dark and frame share it", async () => {
    // Two bias frames, two darks of 500 s, a frame of 1500 s: the bias enters 1 − 1500·2/1000 = −2 times.
    const calibrations = await makeCalibrations({
      bias: biasFrames(2, 500, true),
      dark: darkFrames(2, 500, 600, true),
    });
    expect(calibrations.dark!.biasPerSecond).toBeCloseTo(2 / 1000, 12);
    // Every pixel differs, so every one keeps its own.
    expect(calibrations.dark!.own.every((own) => own === 1)).toBe(true);
    const frame = correctFrame(expose(LAYOUT, { ...SKY, electrons: () => 0, rough: true }, 9), calibrations);
    const median = (values: Float32Array) => values.slice().sort()[values.length >> 1];
    const ofFirst = frame.noise.fixedVarianceImage!.filter((_, at) => at % NX < 50 && at < 40 * NX);
    const read = NOISES[0] ** 2;
    // Read noise + 4 × bias variance + dark variance × t²: 1 + 4/2 + 2·9/4 = 7.5 read noise variances; and dark of
    // 0.064 e⁻/s, 96 e⁻ in the frame and 96 · 1500/1000 in what is taken off: 240 e⁻² more.
    expect(Math.abs(median(ofFirst) / (7.5 * read + 240) - 1)).toBeLessThan(0.06);
    const { sigma, mean, n } = momentsOf(pullsOf(frame, () => 0));
    expect(Math.abs(sigma - 1)).toBeLessThan(0.04);
    expect(Math.abs(mean)).toBeLessThan(5 / Math.sqrt(n));
  });

  it("adds no noise of bias and dark frames whose pixels show nothing of their own, hot ones aside", async () => {
    const calibrations = await makeCalibrations({ bias: biasFrames(2, 500), dark: darkFrames(2, 1500, 600) });
    const hot = (x: number, y: number) => (x * 7 + y * 13) % 97 === 0;
    calibrations.dark!.own.forEach((own, at) => {
      if (hot(at % NX, Math.floor(at / NX))) expect(own).toBe(1);
    });
    expect(calibrations.dark!.own.reduce((sum, own) => sum + own, 0)).toBeLessThan((NX * NY) / 90);
    expect(calibrations.assumptions.filter((text) => text.includes("so a smooth "))).toHaveLength(2);
    const frame = correctFrame(expose(LAYOUT, { ...SKY, electrons: () => 0 }, 9), calibrations);
    const at = 20 * NX + 25;
    // Dark of 0.004 e⁻/s in 1500 s has 6 e⁻; one by one the stacks would add (1 − 1)² of the bias and half of read² + 6.
    expect(frame.noise.fixedVarianceImage![at] / (NOISES[0] ** 2 + 6)).toBeGreaterThan(0.97);
    expect(frame.noise.fixedVarianceImage![at] / (NOISES[0] ** 2 + 6)).toBeLessThan(1.15);
    const pulls = pullsOf(frame, () => 0);
    const { sigma, mean, n } = momentsOf(pulls);
    expect(Math.abs(sigma - 1)).toBeLessThan(0.03);
    expect(Math.abs(mean)).toBeLessThan(5 / Math.sqrt(n));
    const ofHot = momentsOf(pulls.filter((_, i) => hot(i % NX, Math.floor(i / NX))));
    expect(Math.abs(ofHot.mean)).toBeLessThan(5 / Math.sqrt(ofHot.n));
    expect(Math.abs(ofHot.sigma - 1)).toBeLessThan(4 / Math.sqrt(2 * ofHot.n));
  });

  it("counts the bias stack's variance in full where a smooth dark holds none of it", async () => {
    const bias = biasFrames(2, 500, "bias");
    const calibrations = await makeCalibrations({ bias, dark: darkFrames(2, 1500, 600, "bias") });
    const frame = correctFrame(expose(LAYOUT, { ...SKY, electrons: () => 0, rough: "bias" }, 9), calibrations);
    // Read noise, dark of 6 e⁻, and half a read noise variance of the two bias frames; the dark's share would be −1 of it.
    const at = 20 * NX + 25;
    expect(calibrations.dark!.own[at]).toBe(0);
    const half = NOISES[0] ** 2 / 2;
    expect((frame.noise.fixedVarianceImage![at] - 2 * half - 6) / half).toBeGreaterThan(0.9);
    const { sigma, n } = momentsOf(pullsOf(frame, () => 0));
    expect(Math.abs(sigma - 1)).toBeLessThan(0.02 + 4 / Math.sqrt(2 * n));
  });

  it("without calibration images keeps its variance in a table of bands", () => {
    const frame = correctFrame(expose(LAYOUT, { ...SKY, seconds: 0 }, 8), noCalibrations());
    expect(frame.noise.fixedVarianceImage).toBe(undefined);
    expect([frame.noise.bandOfRow[39], frame.noise.bandOfRow[40]]).toEqual([0, 1]);
    const table = [0, 60, NX, NX + 60].map((i) => frame.noise.fixedVariance[i]);
    table.forEach((value, k) => {
      expect(value).toBeGreaterThan(NOISES[k] ** 2);
      expect(value / NOISES[k] ** 2).toBeLessThan(1.05);
    });
    expect(frame.assumptions.filter((text) => text.includes(": no "))).toEqual([
      "sci.fits: no bias frames, so bias structure beyond the overscan's level stays in.",
      "sci.fits: no dark frames, so dark current is taken as 0.",
      "sci.fits: no pixel flats, so all pixels are taken to respond alike.",
    ]);
  });

  it("divides light and its noise by the response, each as often as it must", () => {
    const raw = expose(LAYOUT, SKY, 8);
    const plain = correctFrame(raw, noCalibrations());
    const half = {
      response: new Float32Array(NX * NY).fill(0.5),
      relativeVariance: new Float32Array(NX * NY).fill(1e-5),
      unusable: new Uint8Array(NX * NY),
      scatter: [0.01],
    };
    const { electrons, noise } = correctFrame(raw, { ...noCalibrations(), response: half });
    const at = 70 * NX + 61;
    expect(electrons[at]).toBe(2 * plain.electrons[at]);
    expect(noise.fixedVarianceImage![at]).toBeCloseTo(4 * plain.noise.fixedVariance[NX + 61], 4);
    expect([noise.inverseResponse![at], noise.responseRelativeVariance![at]]).toEqual([2, Math.fround(1e-5)]);
  });

  it("is exact without noise, drift included, to what the spline can follow", () => {
    const raw = expose(LAYOUT, { ...SKY, seconds: 0, noise: false }, 8);
    const frame = correctFrame(raw, noCalibrations());
    const amplifier = (x: number, y: number) => (x < 50 ? 0 : 1) + (y < 40 ? 0 : 2);
    frame.electrons.forEach((value, at) => {
      const [x, y] = [at % NX, Math.floor(at / NX)];
      const expected = light(x, y) * response(x, y) + GAINS[amplifier(x, y)] * biasAdu(x, y);
      expect(Math.abs(value - expected)).toBeLessThan(0.02);
    });
  });

  it("does not touch the raw frame", async () => {
    const raw = expose(LAYOUT, SKY, 7);
    const before = Float64Array.from(raw.data);
    correctFrame(raw, await makeCalibrations({ bias: biasFrames(2) }));
    expect(raw.data).toEqual(before);
  });

  it("with dispersion along axis 2 is the transposed picture of the same frame", () => {
    const raw = expose(LAYOUT, SKY, 7);
    const upright = correctFrame(raw, noCalibrations());
    const toml = { file: "s.toml", detector: { dispersionAxis: 2 as const, amplifiers: [] } };
    // Ribbons run along axis 1 here, so tell the same frame turned on its side instead: axes exchanged in the file.
    const side: RawImage = { ...raw, nx: raw.ny, ny: raw.nx, data: new Float64Array(raw.data.length) };
    for (let y = 0; y < raw.ny; y++) {
      for (let x = 0; x < raw.nx; x++) side.data[x * raw.ny + y] = raw.data[y * raw.nx + x];
    }
    const exchanged = (text: string) => text.replace(/\[(.+),(.+)\]/, "[$2,$1]");
    const amplifiers = [1, 2, 3, 4].map((n) => ({
      data: exchanged(String(LAYOUT.cards[`DATASEC${n}`])),
      overscan: [exchanged(String(LAYOUT.cards[`BIASSEC${n}`]))],
      place: exchanged(String(LAYOUT.cards[`CCDSEC${n}`])),
    }));
    const turned = correctFrame(side, noCalibrations(), { ...toml, detector: { ...toml.detector, amplifiers } });
    expect([turned.nx, turned.ny, turned.geometry.dispersionAxis]).toEqual([NX, NY, 2]);
    expect([turned.geometry.axis1, turned.geometry.axis2]).toEqual([NY, NX]);
    expect(turned.electrons).toEqual(upright.electrons);
    expect(turned.noise.fixedVariance).toEqual(upright.noise.fixedVariance);
    expect(turned.geometry.digest).not.toBe(upright.geometry.digest);
  });

  it("masks bad pixels, and those whose response or bias is not known", async () => {
    const flats = flatFrames(2);
    for (const flat of flats) for (let y = 0; y < NY; y++) flat.data[y * flat.nx + 16 + 33] = 1010;
    const bias = biasFrames(2);
    for (const frame of bias) frame.data[50 * frame.nx + 16 + 90] = Number.NaN;
    const badPixels = rawFrame("bad.fits", NX, NY, {}, (x, y) => (x === 71 && y < 10 ? 1 : 0));
    const calibrations = await makeCalibrations({ bias, pixelFlat: flats, badPixels });
    const frame = correctFrame(expose(LAYOUT, SKY, 7), calibrations);
    expect(frame.mask[5 * NX + 33] & MaskBit.bad).toBe(MaskBit.bad);
    expect(frame.mask[5 * NX + 71]).toBe(MaskBit.bad);
    expect(frame.mask[12 * NX + 71]).toBe(0);
    expect(frame.mask[50 * NX + 90] & MaskBit.bad).toBe(MaskBit.bad);
    expect(frame.electrons[50 * NX + 90]).toBeNaN();
    expect(calibrations.inputs.map(({ role, name }) => `${role} ${name}`)).toEqual([
      "bias bias0.fits",
      "bias bias1.fits",
      "pixel flat flat0.fits",
      "pixel flat flat1.fits",
      "bad pixels bad.fits",
    ]);
  });

  it("takes a pedestal off by bias frames or bias_level when there is no overscan, else refuses", async () => {
    const cards = { GAIN: 1.5, RDNOISE: 4, SATURATE: 65535, DISPAXIS: 1 };
    const next = seeded(2);
    const pedestal = (name: string, kind: string, extra: number) =>
      rawFrame(name, 60, 50, { ...cards, IMAGETYP: kind, EXPTIME: 0 }, (_, y) =>
        Math.round(700 + extra * (1 + (y % 5)) + (4 / 1.5) * normalDeviate(next)),
      );
    const science = pedestal("sci.fits", "object", 100);
    expect(() => correctFrame(science, noCalibrations())).toThrow(
      "sci.fits: amplifier 1 has no overscan and no bias frame was given, so its zero level is not known; give --bias, an overscan section, or bias_level in the spectrograph file.",
    );
    const bias = [1, 2, 3, 4].map((n) => pedestal(`bias${n}.fits`, "bias", 0));
    const frame = correctFrame(science, await makeCalibrations({ bias }));
    const { mean, sigma, n } = momentsOf(
      frame.electrons.map((value, at) => value - 150 * (1 + (Math.floor(at / 60) % 5))),
    );
    // The four bias frames' pixels are alike, so their mean level is taken off and adds next to nothing.
    const expected = Math.sqrt(16 + 1.5 ** 2 / 12);
    expect(Math.abs(mean)).toBeLessThan((4 * expected) / Math.sqrt(n));
    expect(Math.abs(sigma / expected - 1)).toBeLessThan(4 / Math.sqrt(2 * n));
    expect(frame.noise.fixedVarianceImage![30 + 25 * 60]).toBeGreaterThan(16);
    expect(frame.noise.fixedVarianceImage![30 + 25 * 60]).toBeLessThan(16.5);
    const told = { file: "s.toml", detector: { amplifiers: [{ biasLevelAdu: 700 }] } };
    expect(Math.abs(momentsOf(correctFrame(science, noCalibrations(), told).electrons).mean - 450)).toBeLessThan(0.4);
  });
});
