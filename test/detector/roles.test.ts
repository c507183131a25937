/** Frames handed over as what they are not, and frames that are no raw frames: each gets one clear sentence. */
import { describe, expect, it } from "vitest";
import { makeCalibrations, noCalibrations } from "../../src/detector/calibrations.js";
import { correctFrame } from "../../src/detector/correct.js";
import { exposureKind } from "../../src/detector/exposure.js";
import type { RawImage } from "../../src/detector/raw.js";
import type { Role } from "../../src/detector/roles.js";
import { Header } from "../../src/fits/header.js";
import { normalDeviate } from "../scene.js";
import { type Cards, ONE_AMPLIFIER, rawFrame, seeded, without } from "./rawFrames.js";

/** Ribbons 5 px apart along x, 79 rows. */
const ribbon = (y: number) => Math.exp(-(((y % 5) - 2) ** 2) / 2);
const isLine = (x: number) => [7, 31, 32, 55, 83].includes(x);
const LIGHT: Record<string, (x: number, y: number) => number> = {
  dark: () => 0,
  fibres: (x, y) => 9000 * ribbon(y) * (1 - 0.002 * x),
  lines: (x, y) => (isLine(x) ? 12000 * ribbon(y) : 3),
  even: (x, y) => 15000 - 8 * x + 11 * y,
  comb: (x) => ([3, 5, 12, 14, 21, 30, 33, 41, 55, 58, 70, 72, 85, 96].includes(x) ? 9000 : 40),
  spots: (x, y) => (x % 10 === 3 && y % 9 === 4 ? 20000 : 300),
};

function frame(light: string, cards: Cards = {}, name = `${light}.fits`, seed = 1): RawImage {
  const next = seeded(seed);
  return rawFrame(name, 124, 80, { ...ONE_AMPLIFIER, ...cards }, (x, y) => {
    const signal = x < 100 ? LIGHT[light](x, y) : 0;
    return Math.round(1000 + signal + Math.sqrt(signal / 1.6 + 2.06 ** 2) * normalDeviate(next));
  });
}

const asRole = (raw: RawImage, role: Role) => () => correctFrame(raw, noCalibrations(), undefined, { role });

describe("kinds of exposure", () => {
  it.each([
    ["bias", "bias"],
    ["ZERO", "bias"],
    ["Dark frame", "dark"],
    ["detflat", "detector flat"],
    ["dome flat", "flat"],
    ["fibre flat", "fibre flat"],
    ["skyflat", "twilight"],
    ["COMP", "arc"],
    ["object", "science"],
    ["focus", "unknown"],
  ])("IMAGETYP %s is %s", (word, kind) => {
    expect(exposureKind(frame("dark", { IMAGETYP: word })).kind).toBe(kind);
  });

  it("asks OBJECT only when the others are silent, and the primary header too", () => {
    expect(exposureKind(frame("dark", { OBSTYPE: "dark", OBJECT: "bias" }))).toEqual({
      kind: "dark",
      said: "OBSTYPE 'dark'",
    });
    const raw = frame("dark", {});
    raw.primaryHeader = new Header([{ keyword: "OBJECT", value: "arc lamp", comment: "" }]);
    expect(exposureKind(raw)).toEqual({ kind: "arc", said: "OBJECT 'arc lamp'" });
  });
});

describe("calibrations of another kind", () => {
  it.each<[string, RawImage, Role, string]>([
    [
      "a bias with light",
      frame("fibres", { EXPTIME: 0 }),
      "bias",
      "fibres.fits was given as a bias, but there is light in it (5 to 95 % of its pixels span ",
    ],
    ["an evenly lit bias", frame("even", {}), "bias", "even.fits was given as a bias, but there is light in it"],
    [
      "an exposed bias",
      frame("dark", { EXPTIME: 300, IMAGETYP: "dark" }),
      "bias",
      "dark.fits was given as a bias, but it was exposed for 300 s, and its IMAGETYP 'dark' is not a bias; check the list of frames.",
    ],
    [
      "a dark of 0 s",
      frame("dark", { EXPTIME: 0 }),
      "dark",
      "dark.fits was given as a dark, but it lasted 0 s, and a dark current per second cannot come from that; check the list of frames.",
    ],
    [
      "a dark without a time",
      frame("dark"),
      "dark",
      "dark.fits was given as a dark, but its header gives no EXPTIME or DARKTIME",
    ],
    [
      "a dark with light",
      frame("fibres", { EXPTIME: 60 }),
      "dark",
      "fibres.fits was given as a dark, but there is light in it",
    ],
    [
      "a pixel flat with the lamp off",
      frame("dark"),
      "pixel flat",
      "dark.fits was given as a pixel flat, but there is hardly any light in it (median ",
    ],
    [
      "an arc as pixel flat",
      frame("lines"),
      "pixel flat",
      "and a pixel flat lights the detector evenly; check the list of frames.",
    ],
    [
      "a fibre flat as pixel flat, by its header",
      frame("fibres", { IMAGETYP: "fibre flat" }),
      "pixel flat",
      "fibres.fits was given as a pixel flat, but its IMAGETYP 'fibre flat' says that it is a fibre flat; check the list of frames, or correct the header.",
    ],
    [
      "a fibre flat with the lamp off",
      frame("dark", { IMAGETYP: "flat" }),
      "fibre flat",
      "dark.fits was given as a fibre flat, but there is hardly any light in it",
    ],
    [
      "an arc as fibre flat, by its pixels",
      frame("lines"),
      "fibre flat",
      "lines.fits was given as a fibre flat, but its light stands in lines (along its bright rows the median is ",
    ],
    [
      "a science frame as fibre flat",
      frame("fibres", { IMAGETYP: "object" }),
      "fibre flat",
      "fibres.fits was given as a fibre flat, but its IMAGETYP 'object' says that it is a science frame; check the list of frames, or correct the header.",
    ],
    [
      "a bias as arc",
      frame("dark", { IMAGETYP: "bias" }),
      "arc",
      "dark.fits was given as an arc, but its IMAGETYP 'bias' says that it is a bias",
    ],
    [
      "a dark as science frame",
      frame("dark", { IMAGETYP: "dark" }),
      "science",
      "dark.fits was given as a science frame, but its IMAGETYP 'dark' says that it is a dark",
    ],
    [
      "a saturated flat",
      frame("even", { SATURATE: 15500 }),
      "pixel flat",
      "of its pixels are saturated; check the list of frames.",
    ],
  ])("%s", (_, raw, role, message) => {
    expect(asRole(raw, role)).toThrow(message);
  });

  it("where only the header disagrees, a warning is enough for a bias", () => {
    const raw = frame("dark", { IMAGETYP: "object", EXPTIME: 0 });
    expect(asRole(raw, "bias")().warnings).toContain(
      "dark.fits is used as a bias, though its IMAGETYP 'object' says a science frame; its pixels do not contradict the role.",
    );
  });

  it.each<[string, Role]>([
    ["dark", "bias"],
    ["even", "pixel flat"],
    ["fibres", "fibre flat"],
    ["lines", "arc"],
    ["fibres", "science"],
  ])("%s passes as %s without a word", (light, role) => {
    expect(asRole(frame(light), role)().warnings).toEqual([]);
  });

  it("ribbons of a fibre flat without a telling header do not become a pixel response", async () => {
    const fibres = rawFrame(
      "f.fits",
      124,
      80,
      ONE_AMPLIFIER,
      (x, y) => 1000 + (x < 100 ? 4000 + LIGHT.fibres(x, y) : (x + y) % 3),
    );
    await expect(makeCalibrations({ pixelFlat: [fibres] })).rejects.toThrow(
      /^f\.fits: given as pixel flats, but the pixels scatter by \d+ % about their large-scale shape where a few per cent are expected; ribbons or lines of light cannot serve/,
    );
  });

  it("of another binning or window are refused, with both names", async () => {
    const other = { ...ONE_AMPLIFIER, CCDSUM: "2 2" };
    const binned = rawFrame("b2.fits", 124, 80, other, (x, y) => 1000 + ((x * 7 + y * 3) % 5));
    await expect(makeCalibrations({ bias: [frame("dark"), binned] })).rejects.toThrow(
      "dark.fits and b2.fits come from different readouts (binning 1 × 1 against 2 × 2); use frames of the same binning and window.",
    );
    const calibrations = await makeCalibrations({ bias: [frame("dark", {}, "b1.fits")] });
    expect(() => correctFrame(binned, calibrations)).toThrow("b1.fits and b2.fits come from different readouts");
  });

  it("a frame that disagrees with its stack beyond noise is named", async () => {
    const odd = rawFrame(
      "odd.fits",
      124,
      80,
      ONE_AMPLIFIER,
      (x, y) => 1000 + ((x * 7 + y * 3) % 5) + (x < 100 ? 15 : 0),
    );
    const bias = [frame("dark", {}, "a.fits", 1), odd, frame("dark", {}, "c.fits", 2), frame("dark", {}, "d.fits", 3)];
    const { warnings, inputs } = await makeCalibrations({ bias });
    const [, seen, expected] =
      /^odd\.fits has a level of ([\d.]+) e⁻ where the other bias frames let expect ([\d.]+) e⁻; it is left out, and 3 of the 4 bias frames remain\.$/.exec(
        warnings[0],
      )!;
    // 15 ADU of 1.6 e⁻ on most of the frame, overscan taken off.
    expect(Math.abs(Number(seen) - Number(expected) - 24)).toBeLessThan(3.3);
    expect(inputs.map(({ name }) => name)).toEqual(["a.fits", "c.fits", "d.fits"]);
    const two = await makeCalibrations({ bias: [bias[0], odd] });
    expect(two.warnings.filter((text) => text.includes("disagree"))).toHaveLength(1);
    expect(two.warnings.find((text) => text.includes("disagree"))).toMatch(
      /^odd\.fits: \d+ % of its pixels disagree with the other bias frames by more than read noise and gain explain/,
    );
  });

  it("dark frames need a time in the frame they are applied to", async () => {
    const calibrations = await makeCalibrations({ dark: [frame("dark", { DARKTIME: 600 })] });
    expect(() => correctFrame(frame("fibres"), calibrations)).toThrow(
      "fibres.fits: its header gives no EXPTIME or DARKTIME, which dark frames need; add it to the header or leave the dark frames out.",
    );
  });
});

describe("no raw frame", () => {
  const bare = without(ONE_AMPLIFIER, "BIASSEC", "DATASEC", "CCDSEC");
  it("whose BZERO was lost", () => {
    const raw = frame("fibres");
    for (let i = 0; i < raw.data.length; i++) raw.data[i] -= 32768;
    expect(asRole(raw, "science")).toThrow(
      /^fibres\.fits: levels from -3\d+ to -\d+ ADU, but a detector's counts are not negative; a BZERO of 32768 seems to be lost, restore it in the header\.$/,
    );
  });

  it("in electrons, unless the spectrograph file vouches for its gain", () => {
    const raw = { ...frame("fibres"), unit: "electron" };
    expect(asRole(raw, "science")).toThrow(
      "fibres.fits: its unit is 'electron', so it was reduced already, but raw counts (ADU) were expected; give the raw frame, or say gain = 1 for its amplifiers in the spectrograph file.",
    );
    const vouched = { file: "s.toml", detector: { amplifiers: [{ gain: 1, readNoise: 3.3 }] } };
    expect(correctFrame(raw, noCalibrations(), vouched).nx).toBe(100);
  });

  it("whose zero level is gone", () => {
    const next = seeded(3);
    const raw = rawFrame("done.fits", 124, 80, bare, () => 2 + 3 * normalDeviate(next));
    expect(asRole(raw, "science")).toThrow(
      /^done\.fits: 2\d % of its pixels are negative \(down to -[\d.]+\) and it has no overscan, so its zero level was taken off already; give the raw frame, or say bias_level = 0 in the spectrograph file\.$/,
    );
  });

  it("without any value", () => {
    expect(
      asRole(
        rawFrame("nan.fits", 124, 80, ONE_AMPLIFIER, () => Number.NaN),
        "science",
      ),
    ).toThrow("nan.fits: no pixel has a value (all are NaN or blank); take or copy the frame again.");
  });

  it("whose ribbons run along the other axis", () => {
    const raw = frame("fibres", { DISPAXIS: 2 });
    expect(asRole(raw, "science")).toThrow(
      "fibres.fits: wavelength is said to run along axis 2, but the ribbons of light run along axis 1; give dispersion_axis = 1 in the spectrograph file.",
    );
    const told = { file: "s.toml", detector: { dispersionAxis: 2 as const, amplifiers: [] } };
    expect(() => correctFrame(frame("fibres"), noCalibrations(), told)).toThrow("correct dispersion_axis in s.toml.");
  });

  it("neither even light nor lines contradict an axis", () => {
    expect(asRole(frame("comb"), "science")().geometry.dispersionAxis).toBe(1);
    for (const light of ["even", "lines", "spots", "dark"]) {
      expect(asRole(frame(light, { DISPAXIS: 2 }), "science")().geometry.dispersionAxis).toBe(2);
    }
  });
});
