/** Stacks of many frames, read one by one; and frames that do not belong to them. */
import { describe, expect, it } from "vitest";
import { type CalibrationFrames, makeCalibrations } from "../../src/detector/calibrations.js";
import { clippedScatter } from "../../src/detector/clip.js";
import type { FrameList } from "../../src/detector/frameList.js";
import type { RawImage } from "../../src/detector/raw.js";
import { normalDeviate, poissonDeviate } from "../scene.js";
import { type Cards, momentsOf, ONE_AMPLIFIER, rawFrame, seeded } from "./rawFrames.js";

const [NX, NY, GAIN] = [124, 80, 1.6];

interface Shot {
  kind: string;
  seconds?: number;
  /** Mean e⁻ of a pixel, x and y from 0, and how often it is hit. */
  light?: (x: number, y: number) => number;
  hits?: number;
  readNoise?: number;
  cards?: Cards;
}

/** ADU of bias structure that differs from pixel to pixel, 4 ADU rms. */
const pattern = (x: number, y: number) => {
  const wave = Math.sin(12.9898 * x + 78.233 * y) * 43758.5453;
  return 4 * Math.sqrt(12) * (wave - Math.floor(wave) - 0.5);
};

function shot(name: string, seed: number, given: Shot): RawImage {
  const { kind, seconds = 0, light, hits = 0, readNoise = 3.3, cards = {} } = given;
  const next = seeded(seed);
  return rawFrame(name, NX, NY, { ...ONE_AMPLIFIER, IMAGETYP: kind, EXPTIME: seconds, ...cards }, (x, y) => {
    const level = 1000 + (x < 100 ? pattern(x, y) : 0) + (readNoise / GAIN) * normalDeviate(next);
    if (x >= 100) return level;
    const hit = next() < hits ? 300 + 3000 * next() : 0;
    return level + ((light ? poissonDeviate(light(x, y), next) : 0) + hit) / GAIN;
  });
}

const series = (n: number, given: Shot, seed: number) =>
  Array.from({ length: n }, (_, i) => shot(`${given.kind}${i + 1}.fits`, seed + i, given));
const BIAS: Shot = { kind: "bias" };
const DARK: Shot = { kind: "dark", seconds: 900, light: () => 3 };
const flat = (level: number): Shot => ({
  kind: "flat",
  seconds: 5,
  light: (x, y) => level * (1 + 0.02 * Math.sin(9 * x + 5 * y)),
});
const flats = (levels: number[], seed: number) =>
  levels.map((level, i) => shot(`flat${i + 1}.fits`, seed + i, flat(level)));

/** Counts how often each frame is read. */
function listed(frames: RawImage[]): FrameList & { times: number[] } {
  const times = frames.map(() => 0);
  return {
    length: frames.length,
    times,
    read: (index) => {
      times[index]++;
      return { ...frames[index] };
    },
  };
}

const leftOut = async (frames: CalibrationFrames) => {
  const made = await makeCalibrations(frames);
  return {
    made,
    sentences: made.warnings.filter((text) => text.includes("left out")),
    names: made.stacks!.flatMap((stack) => stack.frames.filter(({ used }) => !used).map(({ name }) => name)),
  };
};

describe("stacks of many frames", () => {
  it("are the true bias within their errors, whatever the number", async () => {
    for (const n of [3, 7, 12, 30]) {
      const { bias, warnings } = await makeCalibrations({ bias: series(n, { ...BIAS, hits: 0.003 }, 100 * n) });
      expect(warnings).toEqual([]);
      // Against the mean of the pattern: the overscan takes its own level off, and with it any common offset.
      const pulls = bias!.mean.map(
        (value, i) => (value - GAIN * pattern(i % 100, Math.floor(i / 100))) / Math.sqrt(bias!.variance[i]),
      );
      // A pixel that was hit in two of three frames is lost to any median.
      const { mean, sigma, n: kept } = clippedScatter(pulls);
      expect(pulls.length - kept).toBeLessThan(6);
      // Of the overscan's level every row has its own error, counted in the variance as if pixels had it for themselves.
      expect(Math.abs(mean)).toBeLessThan(0.06);
      expect(Math.abs(sigma - 1)).toBeLessThan(0.03);
      expect(bias!.variance[777]).toBeCloseTo(3.3 ** 2 / n, -Math.log10(0.15 / n));
    }
  });

  it("read up to seven frames once, more of them twice, and hold what can be iterated once only", async () => {
    for (const [n, times] of [
      [7, 1],
      [8, 2],
    ]) {
      const list = listed(series(n, BIAS, 40));
      await makeCalibrations({ bias: list });
      expect(list.times).toEqual(list.times.map(() => times));
    }
    const frames = series(9, { ...BIAS, hits: 0.003 }, 60);
    function* once() {
      yield* frames;
    }
    const [a, b] = [await makeCalibrations({ bias: listed(frames) }), await makeCalibrations({ bias: once() })];
    expect(a.bias).toEqual(b.bias);
  });

  it("tell when a file changed between its two readings", async () => {
    const frames = series(8, BIAS, 70).map((frame, i) => ({ ...frame, checksum: `sum ${i}` }));
    const list = listed(frames);
    const read = (index: number) => {
      const raw = list.read(index) as RawImage;
      return index === 5 && list.times[5] === 2 ? { ...raw, checksum: "another" } : raw;
    };
    await expect(makeCalibrations({ bias: { length: 8, read } })).rejects.toThrow(
      "bias6.fits changed while it was read for the second time; wait until it is whole.",
    );
  });

  it("report levels, noise and clipped shares of each role", async () => {
    const { stacks } = await makeCalibrations({
      bias: series(8, { ...BIAS, hits: 0.004 }, 80),
      dark: series(3, DARK, 90),
      pixelFlat: flats([20000, 9000, 30000], 95),
    });
    expect(stacks!.map(({ role }) => role)).toEqual(["bias", "dark", "pixel flat"]);
    const [bias, dark, pixelFlat] = stacks!;
    for (const { clippedShare, used } of bias.frames) {
      expect([used, Math.abs(clippedShare - 0.004) < 0.003]).toEqual([true, true]);
    }
    expect(bias.noise).toBeCloseTo(3.3 / Math.sqrt(8), 1);
    expect(dark.level * 900).toBeCloseTo(3, 0);
    expect(pixelFlat.frames.map(({ level }) => Math.round(level / 1000))).toEqual([20, 9, 30]);
    expect(pixelFlat.level).toBeCloseTo(1, 2);
  });
});

describe("frames that do not belong to their stack", () => {
  it("twilight among bias frames that do not say what they are is left out", async () => {
    const bias = series(5, BIAS, 200);
    bias[3] = shot("odd.fits", 9, { kind: "", light: () => 400 });
    const { made, sentences } = await leftOut({ bias });
    expect(sentences).toHaveLength(1);
    expect(sentences[0]).toMatch(
      /^odd\.fits was given as a bias, but there is light in it \(.*\); it is left out, and 4 of the 5 bias frames remain\.$/,
    );
    expect(made.inputs).toHaveLength(4);
    expect(made.warnings).toHaveLength(1);
  });

  it("a bias with a faint gradient of light is told from its structure", async () => {
    const bias = series(9, BIAS, 210);
    bias[2] = shot("glow.fits", 9, { kind: "bias", light: (x) => Math.max(0, 12 - x / 3) });
    const { sentences, names } = await leftOut({ bias });
    expect(names).toEqual(["glow.fits"]);
    expect(sentences[0]).toMatch(
      /^glow\.fits has another structure than the other bias frames: a twentieth of its area is off by over \d+(\.\d+)? e⁻; it is left out, and 8 of the 9 bias frames remain\.$/,
    );
  });

  it("a light leak in one of three darks is left out, faint as it is", async () => {
    const dark = series(3, DARK, 220);
    dark[0] = shot("leak.fits", 9, { ...DARK, light: (x, y) => 3 + (x + y > 130 ? 9 : 0) });
    const { names, made } = await leftOut({ bias: series(5, BIAS, 1), dark });
    expect(names).toEqual(["leak.fits"]);
    expect(made.dark!.typicalRate[0]).toBeCloseTo(3 / 900, 3);
  });

  it("darks of other lengths, and warmer by a tenth, belong", async () => {
    const dark = [300, 900, 1800, 900].map((seconds, i) =>
      shot(`dark${i}.fits`, 230 + i, { kind: "dark", seconds, light: () => (i === 3 ? 0.0352 : 0.032) * seconds }),
    );
    expect((await leftOut({ bias: series(5, BIAS, 1), dark })).names).toEqual([]);
  });

  it("a pixel flat with the lamp off, and a saturated one, are left out; levels may differ", async () => {
    const pixelFlat = [...flats([20000, 5000, 28000, 12000, 9000], 240)];
    pixelFlat.push(shot("off.fits", 9, { ...flat(0), light: () => 1 }));
    pixelFlat.push(shot("full.fits", 9, flat(200000)));
    const { sentences, names } = await leftOut({ bias: series(3, BIAS, 1), pixelFlat });
    expect(names).toEqual(["off.fits", "full.fits"]);
    expect(sentences[0]).toMatch(
      /^off\.fits was given as a pixel flat, but there is hardly any light in it .* as with the lamp off; it is left out, and 5 of the 7 pixel flat frames remain\.$/,
    );
    expect(sentences[1]).toMatch(
      /^full\.fits was given as a pixel flat, but 100 % of its pixels are saturated; it is left out/,
    );
  });

  it("another gain is told from the header, and where the header hides it from the noise", async () => {
    const bias = series(4, BIAS, 250);
    const told = shot("told.fits", 9, { ...BIAS, cards: { GAIN: 2 } });
    expect((await leftOut({ bias: [...bias, told] })).sentences).toEqual([
      "told.fits was read with a gain of 2 e⁻/ADU, the other bias frames with 1.6; it is left out, and 4 of the 5 bias frames remain.",
    ]);
    const hidden = shot("hidden.fits", 9, { ...BIAS, readNoise: 6.6 });
    const { names, sentences } = await leftOut({ bias: [...bias.slice(0, 2), hidden] });
    expect(names).toEqual(["hidden.fits"]);
    const times = Number(/has ([\d.]+) times the noise of the other bias frames/.exec(sentences[0])?.[1]);
    expect(Math.abs(times - 2)).toBeLessThan(0.1);
  });

  it("half of them or more are refused, since nobody can tell which are right", async () => {
    const bright = { ...DARK, light: () => 60 };
    const dark = [
      ...series(2, DARK, 260),
      ...series(2, bright, 270).map((raw, i) => ({ ...raw, name: `warm${i}.fits` })),
    ];
    await expect(makeCalibrations({ bias: series(3, BIAS, 1), dark })).rejects.toThrow(
      /of the 4 dark frames differ from the rest, too many to tell which are right \(.*\); give frames that belong together\.$/,
    );
    const bias = series(3, BIAS, 290);
    bias.push(shot("lit.fits", 8, { kind: "", light: () => 400 }), shot("warm.fits", 9, { ...BIAS, light: () => 20 }));
    expect((await leftOut({ bias })).names).toEqual(["lit.fits", "warm.fits"]);
    const lit = shot("lit2.fits", 10, { ...BIAS, light: () => 20 });
    await expect(makeCalibrations({ bias: [...bias, lit] })).rejects.toThrow("3 of the 6 bias frames differ");
    const off = { ...flat(0), light: () => 1 };
    const pixelFlat = [...flats([20000], 280), shot("off.fits", 9, off)];
    await expect(makeCalibrations({ pixelFlat })).rejects.toThrow(
      /^off\.fits was given as a pixel flat, but .* as with the lamp off; check the list of frames\.$/,
    );
  });

  it("the same file given twice counts once", async () => {
    const bias = series(3, BIAS, 310).map((frame, i) => ({ ...frame, checksum: `sum ${i}` }));
    const { sentences, made } = await leftOut({ bias: [bias[0], bias[1], { ...bias[0], name: "copy.fits" }, bias[2]] });
    expect(sentences).toEqual([
      "copy.fits holds the same pixels as bias1.fits; it is left out, and 3 of the 4 bias frames remain.",
    ]);
    expect(made.bias!.variance[777]).toBeCloseTo(3.3 ** 2 / 3, 1);
    expect((await leftOut({ bias: [bias[0], bias[0]] })).names).toEqual(["bias1.fits"]);
  });

  it("of a long list, whichever they are, the centre is made of others", async () => {
    const bias = series(14, { ...BIAS, hits: 0.002 }, 300);
    // All but two of those that would have been held.
    for (const i of [0, 4, 7, 9, 13]) bias[i] = shot(`warm${i}.fits`, 400 + i, { kind: "bias", light: () => 20 });
    const { names, made } = await leftOut({ bias });
    expect(names).toEqual(["warm0.fits", "warm4.fits", "warm7.fits", "warm9.fits", "warm13.fits"]);
    const pulls = made.bias!.mean.map(
      (value, i) => (value - GAIN * pattern(i % 100, Math.floor(i / 100))) / Math.sqrt(made.bias!.variance[i]),
    );
    expect(Math.abs(momentsOf(pulls).mean)).toBeLessThan(0.06);
    expect(Math.abs(momentsOf(pulls).sigma - 1)).toBeLessThan(0.03);
  });
});
