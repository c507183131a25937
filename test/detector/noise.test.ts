import { describe, expect, it } from "vitest";
import { noCalibrations } from "../../src/detector/calibrations.js";
import { correctFrame } from "../../src/detector/correct.js";
import { lookAt } from "../../src/detector/look.js";
import { measureNoise } from "../../src/detector/noise.js";
import type { RawImage } from "../../src/detector/raw.js";
import { normalDeviate, poissonDeviate } from "../scene.js";
import { type Cards, rawFrame, seeded, without } from "./rawFrames.js";

const GAINS = [1.35, 2.2];
const NOISES = [3.2, 5.9];
const CARDS: Cards = {
  NAMPS: 2,
  GAIN1: 1.35,
  RDNOISE1: 3.2,
  DATASEC1: "[1:110,1:150]",
  BIASSEC1: "[221:240,1:150]",
  GAIN2: 2.2,
  RDNOISE2: 5.9,
  DATASEC2: "[111:220,1:150]",
  BIASSEC2: "[241:260,1:150]",
  DISPAXIS: 1,
  SATURATE: 65535,
};

/** `moved`: fibres shifted between exposures, in pixels; ribbons and pixel response make structure that must not count. */
function exposed(
  name: string,
  seed: number,
  level: number,
  cards: Cards = CARDS,
  moved = 0,
  noises = NOISES,
): RawImage {
  const next = seeded(seed);
  return rawFrame(name, 260, 150, cards, (x, y) => {
    const amplifier = x < 110 || (x >= 220 && x < 240) ? 0 : 1;
    const response = 1 + 0.01 * Math.sin(12.9 * x + 78.2 * y);
    const ribbons = 1.1 + Math.sin((y - moved + 0.01 * x) * 1.28);
    const mean = x < 220 ? level * ribbons * response * (1 - 0.001 * x) : 0;
    const counts = poissonDeviate(mean, next) + noises[amplifier] * normalDeviate(next);
    const cosmic = x < 220 && next() < 0.0005 ? 4000 : 0;
    return Math.round(1000 + 2 * Math.sin(y / 30 + seed) + (counts + cosmic) / GAINS[amplifier]);
  });
}

const readNoiseWithConverter = (k: number) => Math.sqrt(NOISES[k] ** 2 + GAINS[k] ** 2 / 12);

describe("noise, measured", () => {
  const bias = [exposed("b1.fits", 1, 0), exposed("b2.fits", 2, 0)];
  const flats = [exposed("f1.fits", 3, 11000), exposed("f2.fits", 4, 17000)];

  it("gain from flats with structure, read noise from bias pairs, within 4 of their own errors", () => {
    const { amplifiers, disagreements, warnings } = measureNoise({ bias, flats });
    expect([disagreements, warnings]).toEqual([[], []]);
    amplifiers.forEach(({ gain, readNoise, readNoiseAdu, readNoiseFrom }, k) => {
      expect(readNoiseFrom).toBe("bias pairs");
      expect(Math.abs(gain!.value - GAINS[k])).toBeLessThan(4 * gain!.error);
      expect(gain!.error / GAINS[k]).toBeLessThan(0.02);
      // Some cosmic rays are clipped from the 110 × 150 differences: n is that, nearly.
      expect((readNoiseAdu!.error / readNoiseAdu!.value) * Math.sqrt(2 * 110 * 150)).toBeCloseTo(1, 2);
      expect(Math.abs(readNoise!.value - readNoiseWithConverter(k))).toBeLessThan(4 * readNoise!.error);
    });
  });

  it("errors are what repeated measurements scatter by", () => {
    const pulls: number[] = [];
    for (let run = 0; run < 12; run++) {
      const pair = [exposed("f1.fits", 50 + 2 * run, 9000), exposed("f2.fits", 51 + 2 * run, 9000)];
      const measured = measureNoise({ frames: [bias[0]], flats: pair });
      pulls.push(...measured.amplifiers.map(({ gain }, k) => (gain!.value - GAINS[k]) / gain!.error));
    }
    const rms = Math.sqrt(pulls.reduce((sum, pull) => sum + pull * pull, 0) / pulls.length);
    // 24 pulls: χ²/24 lies within 0.4…2.1 for all but 1 in 1000 (χ² table, 24 degrees of freedom: 0.1 and 99.9 %).
    expect(rms ** 2).toBeGreaterThan(0.38);
    expect(rms ** 2).toBeLessThan(2.14);
  });

  it("fibres that moved a twentieth of a pixel between the flats do not make a wrong gain", () => {
    const moved = [flats[0], exposed("f3.fits", 5, 15000, CARDS, 0.05)];
    measureNoise({ flats: moved }).amplifiers.forEach(({ gain }, k) => {
      expect(Math.abs(gain!.value - GAINS[k])).toBeLessThan(4 * gain!.error);
    });
  });

  it("calls out a header that is off by over 10 %, not one that is off by less", () => {
    const off = { ...CARDS, GAIN1: 1.35 * 1.25, GAIN2: 2.2 * 1.06, RDNOISE2: 5.9 * 0.8 };
    const { disagreements } = measureNoise({
      bias: [exposed("b1.fits", 1, 0, off), exposed("b2.fits", 2, 0, off)],
      flats: [exposed("f1.fits", 3, 15000, off), exposed("f2.fits", 4, 15000, off)],
    });
    expect(disagreements).toHaveLength(2);
    // √1.25 = 1.118; a scatter of 5.93 e⁻ (converter included) is one of 6.29 at a gain given 1.06 times too large: 1.33 × 4.72.
    expect(disagreements[0]).toMatch(
      /^f1\.fits: the gain of amplifier 1 is given as 1\.6875 e⁻\/ADU, but 1\.3\d+ ± 0\.0\d+ e⁻\/ADU is measured; it makes the error bars of bright light 1\.1[0-3] times too small and every flux 1\.2[1-9] times too large, so give the right one in the spectrograph file\.$/,
    );
    expect(disagreements[1]).toMatch(
      /^b1\.fits: the read noise of amplifier 2 is given as 4\.72 e⁻, but [56]\.\d+ ± 0\.\d+ e⁻ is measured; it makes the error bars of faint light 1\.3[1-5] times too small, so give/,
    );
  });

  it("read noise is taken out of the flats' scatter, which it would raise by 4 %", () => {
    const loud: Cards = { ...CARDS, RDNOISE2: 60 };
    const flats = Array.from({ length: 40 }, (_, i) => exposed(`f${i}.fits`, 700 + i, 58000, loud, 0, [3.2, 60]));
    const { gain } = measureNoise({ flats }).amplifiers[1];
    expect(gain!.error / GAINS[1]).toBeLessThan(0.006);
    expect(Math.abs(gain!.value - GAINS[1])).toBeLessThan(3 * gain!.error);
  });

  it("from the overscan alone gives read noise only", () => {
    const { amplifiers } = measureNoise({ frames: [exposed("s.fits", 9, 300)] });
    amplifiers.forEach(({ readNoise, readNoiseFrom, gain }, k) => {
      expect([readNoiseFrom, gain]).toEqual(["overscan", undefined]);
      expect(Math.abs(readNoise!.value - readNoiseWithConverter(k))).toBeLessThan(4 * readNoise!.error);
    });
  });

  it("says when flats are too faint, of another layout, or without a zero level", () => {
    const faint = measureNoise({ flats: [exposed("f1.fits", 3, 8), exposed("f2.fits", 4, 8)] });
    expect(faint.warnings[0]).toBe(
      "f1.fits: amplifier 1: too little light, or not the same light, in the pair of flats to measure its gain.",
    );
    expect(() => measureNoise({ bias: [bias[0], exposed("x.fits", 1, 0, { ...CARDS, XBINNING: 2 })] })).toThrow(
      "b1.fits and x.fits have different sections or sizes; noise is measured between frames of one readout.",
    );
    expect(() => measureNoise({})).toThrow("no frame was given to measure the noise from; give one or more.");
    const bare = without(CARDS, "BIASSEC1", "BIASSEC2");
    const pair = [exposed("f1.fits", 3, 15000, bare), exposed("f2.fits", 4, 15000, bare)];
    expect(measureNoise({ flats: pair }).warnings[0]).toBe(
      "f1.fits: amplifier 1 has no overscan, so its gain cannot be measured without bias frames; give a pair of them.",
    );
    const bareBias = [exposed("b1.fits", 1, 0, bare), exposed("b2.fits", 2, 0, bare)];
    // The level drifts by 2 ADU and nothing follows it: a good gain, a read noise that includes the drift.
    measureNoise({ flats: pair, bias: bareBias }).amplifiers.forEach(({ gain }, k) => {
      expect(Math.abs(gain!.value - GAINS[k])).toBeLessThan(4 * gain!.error);
    });
  });

  it("a corrected frame warns of a read noise that its overscan contradicts", () => {
    const raw = exposed("s.fits", 9, 300, { ...CARDS, RDNOISE1: 4.4 });
    expect(correctFrame(raw, noCalibrations()).warnings.join(" ")).toMatch(
      /s\.fits: the read noise of amplifier 1 is given as 4\.4 e⁻, but 3\.\d+ ± 0\.0\d+ e⁻ is measured/,
    );
  });

  it("a read noise that is neither given nor measurable is asked for", () => {
    const narrow = { ...without(CARDS, "RDNOISE2"), BIASSEC2: "[258:260,1:150]" };
    expect(() => correctFrame(exposed("s.fits", 9, 300, narrow), noCalibrations())).toThrow(
      "s.fits: amplifier 2: its read noise is not given and cannot be measured from its overscan; give read_noise (e⁻) in the spectrograph file.",
    );
  });

  it("a missing read noise is measured and said", () => {
    const raw = exposed("s.fits", 9, 300, without(CARDS, "RDNOISE2"));
    const frame = correctFrame(raw, noCalibrations());
    expect(frame.assumptions).toContain(
      "s.fits: amplifier 2: the header has no read noise, so it is measured from the overscan.",
    );
    expect(Math.abs(Math.sqrt(frame.noise.fixedVariance[150]) / 5.95 - 1)).toBeLessThan(0.06);
  });
});

describe("a look at a frame", () => {
  it("reports size, kind, noise, levels and ribbons", async () => {
    const raw = exposed("f1.fits", 3, 15000, { ...CARDS, IMAGETYP: "fibre flat", EXPTIME: 12 });
    const report = await lookAt(raw);
    expect(report).toMatchObject({
      name: "f1.fits",
      axis1: 260,
      axis2: 150,
      kind: "fibre flat",
      kindFrom: "IMAGETYP 'fibre flat'",
      exposureSeconds: 12,
      saturation: 65535,
      dispersionAxisSeen: 1,
      levelUnit: "electron",
      warnings: [],
    });
    // 150 rows of a sine of period 2π/1.28 = 4.909 px hold 30 or 31 crests.
    expect([30, 31]).toContain(report.ribbons!.count);
    expect(report.ribbons!.pitch).toBe(5);
    expect(Math.abs(report.levels!.median / (15000 * 1.1 * 0.89) - 1)).toBeLessThan(0.05);
    expect(report.amplifiers).toHaveLength(2);
    expect(JSON.parse(JSON.stringify(report)).geometry.axis1).toBe(220);
  });

  it("goes on where a correction would stop, and says why", async () => {
    const report = await lookAt(exposed("s.fits", 9, 3000, without(CARDS, "GAIN2")));
    expect(report.levelUnit).toBe("adu");
    expect(report.warnings[0]).toMatch(
      /^s\.fits: amplifier 2: the header has no gain, but a gain over 0 e⁻\/ADU is needed/,
    );
    expect(report.ribbons!.count).toBeGreaterThan(28);
    const broken = await lookAt(exposed("s.fits", 9, 3000, { ...CARDS, DATASEC1: "[1:110,1:151]" }));
    expect(broken.geometry).toBe(undefined);
    expect(broken.warnings).toEqual([
      's.fits: DATASEC1: "[1:110,1:151]" ends at y = 151, but the image ends at 150; correct it.',
    ]);
  });

  it("sees ribbons along the other axis", async () => {
    const report = await lookAt(exposed("s.fits", 9, 3000, { ...CARDS, DISPAXIS: 2 }));
    expect(report.dispersionAxisSeen).toBe(1);
    expect(report.warnings[0]).toBe(
      "s.fits: wavelength is said to run along axis 2, but the ribbons of light run along axis 1; give dispersion_axis in the spectrograph file.",
    );
  });
});

describe("errors of gain and read noise", () => {
  /** A small detector, so that hundreds of pairs are drawn in seconds: 46 × 60 pixels, 12 columns of overscan. */
  const SMALL: Cards = { DATASEC: "[1:46,1:60]", BIASSEC: "[47:58,1:60]", GAIN: 1.6, RDNOISE: 5.2, SATURATE: 65535 };
  const small = (seed: number, level: number, reddening = 0) => {
    const next = seeded(seed);
    return rawFrame(`f${seed}.fits`, 58, 60, { ...SMALL, DISPAXIS: 1 }, (x, y) => {
      const response = 1 + 0.01 * Math.sin(12.9 * x + 78.2 * y);
      const mean =
        x < 46 ? level * (1.3 + Math.sin((y + 0.01 * x) * 1.28)) * response * (1 + reddening * Math.sin(x)) : 0;
      return Math.round(
        1000 + Math.sin(y / 20 + seed) + (poissonDeviate(mean, next) + 5.2 * normalDeviate(next)) / 1.6,
      );
    });
  };
  const spread = (pulls: number[]) => {
    const mean = pulls.reduce((sum, pull) => sum + pull, 0) / pulls.length;
    return { mean, std: Math.sqrt(pulls.reduce((sum, pull) => sum + (pull - mean) ** 2, 0) / (pulls.length - 1)) };
  };

  it.each([
    ["bright", 8000],
    ["where read noise has a fifth of the variance", 110],
  ])("cover the truth in 160 pairs of flats, %s", (_, level) => {
    const gains: number[] = [];
    const noises: number[] = [];
    for (let run = 0; run < 160; run++) {
      const seed = 10_000 + 8 * run + level;
      const { amplifiers } = measureNoise({
        bias: [small(seed, 0), small(seed + 1, 0)],
        flats: [small(seed + 2, level), small(seed + 3, level)],
      });
      const { gain, readNoiseAdu } = amplifiers[0];
      gains.push((gain!.value - 1.6) / gain!.error);
      noises.push((readNoiseAdu!.value - Math.sqrt((5.2 / 1.6) ** 2 + 1 / 12)) / readNoiseAdu!.error);
    }
    // The std of 160 pulls is itself good to 1/√320 = 0.056, their mean to 0.08.
    for (const { mean, std } of [spread(gains), spread(noises)]) {
      expect(Math.abs(std - 1)).toBeLessThan(0.15);
      expect(Math.abs(mean)).toBeLessThan(0.32);
    }
  });

  it("grow when structure does not cancel, and flats of different light measure nothing", () => {
    const clean = measureNoise({ flats: [small(1, 8000), small(2, 8000)] }).amplifiers[0].gain!;
    const tinted = measureNoise({ flats: [small(1, 8000), small(2, 8000, 0.02)] }).amplifiers[0].gain!;
    expect(tinted.value).toBeLessThan(1.6 - 4 * clean.error);
    expect(tinted.error).toBeGreaterThan(3 * clean.error);
    const { amplifiers, warnings } = measureNoise({ flats: [small(1, 8000), small(2, 8000, 0.9)] });
    expect([amplifiers[0].gain, warnings]).toEqual([
      undefined,
      ["f1.fits: amplifier 1: too little light, or not the same light, in the pair of flats to measure its gain."],
    ]);
  });
});
