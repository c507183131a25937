import { describe, expect, it } from "vitest";
import { detectorLayout } from "../../src/detector/amplifiers.js";
import { geometryDifferences, requireSameGeometry } from "../../src/detector/geometry.js";
import { formatSection } from "../../src/fits/sections.js";
import { parseSpectrograph } from "../../src/spectrograph.js";
import { type Cards, ONE_AMPLIFIER, rawFrame, without } from "./rawFrames.js";

const TWO: Cards = {
  NAMPS: 2,
  GAIN1: 1.18,
  RDNOISE1: 2.9,
  DATASEC1: "[9:58,1:80]",
  BIASSEC1: "[1:8,1:80]",
  CCDSEC1: "[1:50,1:80]",
  GAIN2: 1.24,
  RDNOISE2: 3.4,
  DATASEC2: "[59:116,1:80]",
  BIASSEC2: "[117:124,1:80]",
  CCDSEC2: "[51:108,1:80]",
  SATURATE: 65535,
  DISPAXIS: 1,
};

const blank = (cards: Cards, nx = 124, ny = 80) => rawFrame("raw.fits", nx, ny, cards, () => 1000);
const layoutOf = (cards: Cards, toml?: string) =>
  detectorLayout(
    blank(cards),
    toml === undefined ? undefined : parseSpectrograph(toml, { file: "s.toml", folder: "/" }),
  );

describe("amplifiers from the header", () => {
  it("reads numbered cards, and skips trailing charge only where the overscan follows the data", () => {
    const layout = layoutOf(TWO);
    expect(layout.amplifiers.map(({ gain, readNoise }) => [gain, readNoise])).toEqual([
      [1.18, 2.9],
      [1.24, 3.4],
    ]);
    expect(layout.amplifiers.map((amplifier) => amplifier.overscan.map((o) => formatSection(o)))).toEqual([
      ["[1:8,1:80]"],
      ["[119:124,1:80]"],
    ]);
    expect(layout.geometry).toMatchObject({ axis1: 108, axis2: 80, dispersionAxis: 1, binning: [1, 1] });
    expect(layout.assumptions).toEqual([
      "raw.fits: amplifier 2: the overscan follows the data, so its first 2 columns, where trailing charge may sit, are left out (overscan_skip).",
    ]);
  });

  it("shares one gain between amplifiers, but never a section", () => {
    const cards = { ...without(TWO, "GAIN1", "GAIN2"), GAIN: 1.5 };
    expect(layoutOf(cards).amplifiers.map(({ gain }) => gain)).toEqual([1.5, 1.5]);
    expect(() => layoutOf(without(TWO, "DATASEC2"))).toThrow(
      "raw.fits: amplifier 2 of 2 has no data section (DATASEC2); give it in the spectrograph file.",
    );
  });

  it("takes the whole image as data when no section is given, and says so", () => {
    const layout = layoutOf({ GAIN: 2.1, READNOIS: 4 });
    expect(formatSection(layout.amplifiers[0].data)).toBe("[1:124,1:80]");
    expect(layout.amplifiers[0].overscan).toEqual([]);
    expect(layout.assumptions).toEqual([
      "raw.fits: no sections are given, so the whole image is taken as data without overscan.",
      "raw.fits: no dispersion axis is given, so wavelength is taken to run along axis 1.",
      "raw.fits: no saturation level is given; 65535 ADU, the ceiling of 16-bit converters, is taken.",
    ]);
  });

  it("closes up quadrants whose places are not given", () => {
    // Overscan strips stand in the middle, columns 51–74; rows 1–30 and 31–80.
    const quadrant = (data: string, overscan: string) => ({ data, overscan });
    const quadrants = [
      quadrant("[1:50,1:30]", "[51:62,1:30]"),
      quadrant("[75:124,1:30]", "[63:74,1:30]"),
      quadrant("[1:50,31:80]", "[51:62,31:80]"),
      quadrant("[75:124,31:80]", "[63:74,31:80]"),
    ];
    const cards: Cards = { NAMPS: 4 };
    quadrants.forEach(({ data, overscan }, i) => {
      Object.assign(cards, { [`GAIN${i + 1}`]: 1 + i, [`RDNOISE${i + 1}`]: 3 + i });
      Object.assign(cards, { [`DATASEC${i + 1}`]: data, [`BIASSEC${i + 1}`]: overscan });
    });
    const layout = layoutOf(cards);
    expect(layout.geometry.place).toEqual(["[1:50,1:30]", "[51:100,1:30]", "[1:50,31:80]", "[51:100,31:80]"]);
    expect([layout.geometry.axis1, layout.geometry.axis2]).toEqual([100, 80]);
    expect(layout.amplifiers[1].overscan.map((o) => formatSection(o))).toEqual(["[63:74,1:30]"]);
  });

  it("turns unbinned places into binned ones, and starts a window at 1", () => {
    const cards = { ...ONE_AMPLIFIER, CCDSUM: "2 1", CCDSEC: "[201:400,11:90]" };
    const layout = layoutOf(cards);
    expect(layout.geometry.binning).toEqual([2, 1]);
    expect(layout.geometry.place).toEqual(["[101:200,11:90]"]);
    expect(formatSection(layout.amplifiers[0].place)).toBe("[1:100,1:80]");
  });

  it("finds overscan above the data", () => {
    const cards = { ...ONE_AMPLIFIER, DATASEC: "[1:124,1:60]", BIASSEC: "[1:124,61:80]", CCDSEC: "[1:124,1:60]" };
    const [amplifier] = layoutOf(cards).amplifiers;
    expect(amplifier.levelFor).toBe("columns");
    expect(amplifier.overscan.map((o) => formatSection(o))).toEqual(["[1:124,63:80]"]);
  });
});

describe("the spectrograph file wins over the header", () => {
  it("and both values are named", () => {
    const layout = layoutOf(
      ONE_AMPLIFIER,
      "[detector]\nsaturation = 50000\n[[detector.amplifier]]\ngain = 1.7\noverscan_skip = 5\n",
    );
    expect(layout.amplifiers[0].gain).toBe(1.7);
    expect(layout.amplifiers[0].readNoise).toBe(3.3);
    expect(layout.saturationAdu).toBe(50000);
    expect(formatSection(layout.amplifiers[0].overscan[0])).toBe("[106:124,1:80]");
    expect(layout.assumptions).toEqual([
      "raw.fits: amplifier 1: gain 1.7 e⁻/ADU is taken from s.toml, not the header's GAIN 1.6 e⁻/ADU.",
      "raw.fits: saturation at 50000 ADU is taken from s.toml, not the header's SATURATE 60000.",
    ]);
  });

  it("for sections too, and for frames without any header", () => {
    const toml = `[[detector.amplifier]]
      gain = 1.1
      read_noise = 3
      data = "[11:60,1:80]"
      overscan = ["[1:10,1:80]"]
      place = "[1:50,1:80]"
      [[detector.amplifier]]
      gain = 1.2
      read_noise = 4
      data = "[61:110,1:80]"
      overscan = "[111:124,1:80]"
      place = "[51:100,1:80]"`;
    const layout = layoutOf({}, toml);
    expect(layout.geometry).toMatchObject({ axis1: 100, axis2: 80, data: ["[11:60,1:80]", "[61:110,1:80]"] });
  });

  it("but must describe as many amplifiers as there are", () => {
    expect(() => layoutOf(TWO, "[[detector.amplifier]]\ngain = 1.7\n")).toThrow(
      "s.toml describes 1 amplifier(s), but raw.fits has 2; give one [[detector.amplifier]] for each.",
    );
  });
});

describe("what cannot be right", () => {
  it.each<[string, Cards, string]>([
    [
      "no gain",
      without(ONE_AMPLIFIER, "GAIN"),
      "raw.fits: amplifier 1: the header has no gain, but a gain over 0 e⁻/ADU is needed, since every error bar hangs on it; give it in the spectrograph file.",
    ],
    ["gain 0", { ...ONE_AMPLIFIER, GAIN: 0 }, "raw.fits: amplifier 1: GAIN is 0, but a gain over 0 e⁻/ADU is needed"],
    ["gain below 0", { ...ONE_AMPLIFIER, GAIN: -1.2 }, "raw.fits: amplifier 1: GAIN is -1.2, but a gain over 0"],
    ["gain NaN", { ...ONE_AMPLIFIER, GAIN: "NaN" }, "raw.fits: amplifier 1: GAIN is NaN, but a gain over 0"],
    [
      "gain a word",
      { ...ONE_AMPLIFIER, GAIN: "high" },
      "raw.fits: GAIN is 'high', but a number was expected; correct the header or give it in the spectrograph file.",
    ],
    [
      "no read noise, no overscan",
      { GAIN: 1.6 },
      "raw.fits: amplifier 1: the header has no read noise and there is no overscan to measure it from; give read_noise (e⁻) in the spectrograph file.",
    ],
    [
      "data leave the frame",
      { ...ONE_AMPLIFIER, DATASEC: "[1:100,1:90]" },
      'raw.fits: DATASEC: "[1:100,1:90]" ends at y = 90, but the image ends at 80; correct it.',
    ],
    [
      "data of the turned frame",
      { ...ONE_AMPLIFIER, DATASEC: "[1:80,1:100]" },
      "; it would fit with the axes exchanged: if the picture was turned, give data, overscan, place and dispersion_axis in the spectrograph file.",
    ],
    [
      "overscan leaves the frame",
      { ...ONE_AMPLIFIER, BIASSEC: "[101:130,1:80]" },
      'raw.fits: BIASSEC: "[101:130,1:80]" ends at x = 130, but the image ends at 124; correct it.',
    ],
    [
      "overscan in the data",
      { ...ONE_AMPLIFIER, BIASSEC: "[90:124,1:80]" },
      "raw.fits: amplifier 1: overscan [90:124,1:80] overlaps the data section [1:100,1:80]; correct BIASSEC or DATASEC.",
    ],
    [
      "overscan without data",
      without(ONE_AMPLIFIER, "DATASEC"),
      "raw.fits: an overscan section (BIASSEC) is given but no data section",
    ],
    [
      "nothing left of the overscan",
      { ...ONE_AMPLIFIER, BIASSEC: "[101:102,1:80]" },
      "raw.fits: amplifier 1: nothing is left of overscan [101:102,1:80] after skipping 2; give a smaller overscan_skip in the spectrograph file.",
    ],
    [
      "place of another size",
      { ...ONE_AMPLIFIER, CCDSEC: "[1:99,1:80]" },
      "raw.fits: amplifier 1: data [1:100,1:80] has 100 × 80 pixels, but its place [1:99,1:80] has 99 × 80; correct CCDSEC or the data section.",
    ],
    [
      "a stray digit in a place",
      { ...TWO, CCDSEC2: "[510001:510058,1:80]" },
      "raw.fits: the amplifiers' places span 510058 × 80 pixels but cover only 8640; correct CCDSEC, or place in the spectrograph file.",
    ],
    [
      "one place missing",
      without(TWO, "CCDSEC2"),
      "raw.fits: amplifier 2 has no place in the assembled frame while others have one; give CCDSEC2, or place in the spectrograph file.",
    ],
    [
      "data overlap",
      { ...TWO, DATASEC2: "[58:115,1:80]", BIASSEC2: "[117:124,1:80]" },
      "raw.fits: the data section [9:58,1:80] of amplifier 1 overlaps the data section [58:115,1:80] of amplifier 2; correct the header or give both in the spectrograph file.",
    ],
    [
      "places overlap",
      { ...TWO, CCDSEC2: "[50:107,1:80]" },
      "raw.fits: the place [1:50,1:80] of amplifier 1 overlaps the place [50:107,1:80] of amplifier 2",
    ],
    [
      "data in the other's overscan",
      { ...TWO, BIASSEC1: "[60:66,1:80]" },
      "raw.fits: the data section [59:116,1:80] of amplifier 2 overlaps the overscan [62:66,1:80] of amplifier 1",
    ],
    [
      "axis 3",
      { ...ONE_AMPLIFIER, DISPAXIS: 3 },
      "raw.fits: DISPAXIS is 3, but 1 or 2 was expected; give dispersion_axis in the spectrograph file.",
    ],
    ["half an amplifier", { ...TWO, NAMPS: 1.5 }, "raw.fits: NAMPS is 1.5, but a count from 1 to 64 was expected"],
    [
      "binning 0",
      { ...ONE_AMPLIFIER, XBINNING: 0 },
      "raw.fits: binning is given as '0 1', but two whole numbers over 0 were expected",
    ],
  ])("%s", (_, cards, message) => {
    expect(() => layoutOf(cards)).toThrow(message);
  });

  it("a look goes on without a gain, and warns", () => {
    const layout = detectorLayout(blank(without(ONE_AMPLIFIER, "GAIN")), undefined, { gainMayBeMissing: true });
    expect(layout.amplifiers[0].gain).toBeNaN();
    expect(layout.warnings[0]).toMatch(/the header has no gain/);
  });
});

describe("geometry", () => {
  it("tells readouts apart by size, binning, sections and axis, and only by these", () => {
    const base = layoutOf(ONE_AMPLIFIER).geometry;
    expect(base.digest).toMatch(/^[0-9a-f]{16}$/);
    expect(layoutOf({ ...ONE_AMPLIFIER, GAIN: 3, RDNOISE: 9, EXPTIME: 5 }).geometry.digest).toBe(base.digest);
    const others: Cards[] = [
      { ...ONE_AMPLIFIER, DISPAXIS: 2 },
      { ...ONE_AMPLIFIER, XBINNING: 2 },
      { ...ONE_AMPLIFIER, CCDSEC: "[11:110,1:80]" },
      { ...ONE_AMPLIFIER, DATASEC: "[1:100,2:80]", CCDSEC: "[1:100,2:80]" },
    ];
    const digests = others.map((cards) => layoutOf(cards).geometry.digest);
    expect(new Set([base.digest, ...digests]).size).toBe(5);
  });

  it("says what differs", () => {
    const a = layoutOf(ONE_AMPLIFIER).geometry;
    const b = layoutOf({ ...ONE_AMPLIFIER, XBINNING: 2, YBINNING: 3, CCDSEC: "[11:110,1:80]" }).geometry;
    expect(geometryDifferences(a, a)).toEqual([]);
    expect(() => requireSameGeometry(a, "flat.fits", b, "sci.fits")).toThrow(
      "flat.fits and sci.fits come from different readouts (binning 1 × 1 against 2 × 3; places [1:100,1:80] against [11:110,1:80]); use frames of the same binning and window.",
    );
  });
});
