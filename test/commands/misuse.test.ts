/** Calibration frames put to the wrong use, headers that cannot be, layouts that do not fit: one clear sentence each, an
 * error where the result would be wrong and a warning where it is still right. */
import { readdirSync, readFileSync, rmSync, writeFileSync } from "node:fs";
import { join } from "node:path";
import { afterAll, afterEach, beforeAll, describe, expect, test } from "vitest";
import { readImage } from "../../src/fits/image.js";
import { writeFits } from "../../src/fits/write.js";
import { readTramlines } from "../../src/tramlines/file.js";
import { hatchel, lines, SMALL_SCENE, smallNight } from "./spawned.js";

const SCIENCE = "night/raw/sci_01.fits";
const FLAT = "night/raw/fflat_01.fits";
const ARC = "night/raw/arc_01.fits";
const BIAS = "night/raw/bias_01.fits";
const KNOWN = ["--spectrograph", "night/spectrograph.toml"];

let cwd: string;

beforeAll(async () => {
  cwd = smallNight();
  simulate("window", SMALL_SCENE.replace("[200, 150]", "[200, 141]"));
  const bench = SMALL_SCENE.slice(0, SMALL_SCENE.indexOf("[[exposure]]"));
  const exposure = (name: string, kind: string) => `[[exposure]]\nname = "${name}"\nkind = "${kind}"\nseconds = 10\n`;
  simulate("more", `${bench}${exposure("dark", "dark")}${exposure("detflat", "detector-flat")}`);
  done(["trace", FLAT, "-o", "tramlines.fits", ...KNOWN]);
  done(["extract", SCIENCE, "--tramlines", "tramlines.fits", "-o", "spectra.fits", ...KNOWN]);
  done(["trace", "window/raw/fflat_01.fits", "-o", "window.fits", "--spectrograph", "window/spectrograph.toml"]);
  copy(BIAS, "lamp-off.fits", { IMAGETYP: "'fibre flat'", EXPTIME: "10" });
  copy(BIAS, "dark-0-s.fits", { IMAGETYP: "'dark    '" });
  copy(FLAT, "light-in-bias.fits", { IMAGETYP: "'bias    '", EXPTIME: "0" });
  copy(SCIENCE, "says-flat.fits", { IMAGETYP: "'flat    '" });
  copy(FLAT, "says-science.fits", { IMAGETYP: "'object  '" });
  copy(ARC, "arc-silent.fits", { IMAGETYP: "'        '", OBJECT: "'        '" });
  copy(FLAT, "flat-silent.fits", { IMAGETYP: "'        '", OBJECT: "'        '" });
  copy(SCIENCE, "binned.fits", {}, { INSTRUME: "CCDSUM  = '2 1'" });
  copy(SCIENCE, "gain-0.fits", { GAIN1: "0" });
  copy(SCIENCE, "gain-missing.fits", {}, { GAIN1: "COMMENT" });
  copy(SCIENCE, "overlap.fits", { DATASEC1: "'[11:210,1:150]'" });
  copy(SCIENCE, "leaves.fits", { DATASEC1: "'[31:230,1:150]'" });
  copy(SCIENCE, "misplaced.fits", { CCDSEC1: "'[1:190,1:150]'" });
  copy(SCIENCE, "no-section.fits", { DATASEC1: "'1-200'" });
  await reduced();
});
afterEach(() => rmSync(join(cwd, "out.fits"), { force: true }));
afterAll(() => rmSync(cwd, { recursive: true }));

function done(args: string[]): void {
  const run = hatchel([...args, "--quiet"], { cwd });
  if (run.code !== 0) throw new Error(run.stderr);
}

function simulate(folder: string, scene: string): void {
  writeFileSync(join(cwd, `${folder}.toml`), scene);
  done(["simulate", `${folder}.toml`, "-o", folder]);
}

/** A frame under a new name, cards of its header set to `values` or, whole, to `cards`. */
function copy(from: string, to: string, values: Record<string, string>, cards: Record<string, string> = {}): void {
  const bytes = readFileSync(join(cwd, from));
  for (let at = 0; at < 2880; at += 80) {
    const keyword = bytes.toString("latin1", at, at + 8).trimEnd();
    let card: string | undefined = /^(CHECKSUM|DATASUM)$/.test(keyword) ? "COMMENT" : cards[keyword];
    if (card === undefined && keyword in values) card = `${keyword.padEnd(8)}= ${values[keyword].padStart(20)}`;
    if (card !== undefined) bytes.write(card.padEnd(80), at, "latin1");
  }
  writeFileSync(join(cwd, to), bytes);
}

/** Frames that another program has been over already. */
async function reduced(): Promise<void> {
  const { data, nx, ny } = await readImage(join(cwd, SCIENCE));
  const width = nx - 20;
  const electrons = new Float32Array(width * ny);
  for (let y = 0; y < ny; y++) {
    for (let x = 0; x < width; x++) electrons[y * width + x] = 1.3 * (data[y * nx + x + 20] - data[y * nx]);
  }
  const write = (name: string, unit: string, cards: [string, number][], image: Float32Array) => {
    const header = cards.map(([keyword, value]) => ({ keyword, value, comment: "" }));
    return writeFits(join(cwd, name), [{ kind: "primary", header, image: { data: image, nx: width, ny, unit } }]);
  };
  await write("in-electrons.fits", "electron", [], electrons);
  await write(
    "zeroed.fits",
    "adu",
    [
      ["GAIN", 1.3],
      ["RDNOISE", 3.1],
    ],
    electrons,
  );
  await write(
    "no-zero.fits",
    "adu",
    [
      ["GAIN", 1.3],
      ["RDNOISE", 3.1],
    ],
    electrons.map((e) => Math.abs(e) + 300),
  );
}

type Misuse = [args: string[], sentence: RegExp];

const extract = (frame: string, ...more: string[]) => ["extract", frame, "-o", "out.fits", ...more];
const withFlat = (...more: string[]) => extract(SCIENCE, "--flat", FLAT, ...more);
const byTramlines = (frame: string) => extract(frame, "--tramlines", "tramlines.fits");
/** A calibration frame in a role that it cannot play. */
const given = (name: string, role: string, why: string) =>
  new RegExp(`^hatchel: ${name}\\.fits was given as ${role}, but ${why}; check the list of frames[^.]*\\.\n$`);

const ROLES: Misuse[] = [
  [
    extract(SCIENCE, "--flat", ARC),
    given(
      "arc_01",
      "a fibre flat",
      "its light stands in lines .*, as in an arc, and its IMAGETYP 'arc' is not a fibre flat",
    ),
  ],
  [
    extract(SCIENCE, "--flat", "arc-silent.fits"),
    given("arc-silent", "a fibre flat", "its light stands in lines .*, as in an arc"),
  ],
  [
    extract(FLAT, "--flat", SCIENCE),
    given("sci_01", "a fibre flat", "its IMAGETYP 'object' says that it is a science frame"),
  ],
  [
    extract(SCIENCE, "--flat", "lamp-off.fits"),
    given("lamp-off", "a fibre flat", "there is hardly any light in it .*, as with the lamp off"),
  ],
  [
    extract(SCIENCE, "--flat", "more/raw/detflat.fits"),
    given("detflat", "a fibre flat", "its IMAGETYP 'detflat' says that it is a detector flat"),
  ],
  [
    withFlat("--dark", BIAS),
    given(
      "bias_01",
      "a dark",
      "it lasted 0 s, and a dark current per second cannot come from that, and its IMAGETYP 'bias' is not a dark",
    ),
  ],
  [
    withFlat("--dark", "dark-0-s.fits"),
    given("dark-0-s", "a dark", "it lasted 0 s, and a dark current per second cannot come from that"),
  ],
  [
    withFlat("--dark", FLAT),
    given("fflat_01", "a dark", "there is light in it .*, and its IMAGETYP 'fibreflat' is not a dark"),
  ],
  [
    withFlat("--bias", "more/raw/dark.fits"),
    given("dark", "a bias", "it was exposed for 10 s, and its IMAGETYP 'dark' is not a bias"),
  ],
  [
    withFlat("--bias", "light-in-bias.fits"),
    given(
      "light-in-bias",
      "a bias",
      "there is light in it \\(5 to 95 % of its pixels span \\d+ e⁻ at a read noise of 3\\.1 e⁻\\)",
    ),
  ],
  [
    withFlat("--pixel-flat", FLAT),
    given("fflat_01", "a pixel flat", "its IMAGETYP 'fibreflat' says that it is a fibre flat"),
  ],
  [
    withFlat("--pixel-flat", "flat-silent.fits"),
    /^hatchel: flat-silent\.fits: given as pixel flats, but the pixels scatter by \d+ % about their large-scale shape where a few per cent are expected; .*evenly lit detector\.\n$/,
  ],
  [
    withFlat("--pixel-flat", ARC),
    given(
      "arc_01",
      "a pixel flat",
      "half of its pixels hold less than \\d+ e⁻ .*, and a pixel flat lights the detector evenly, and its IMAGETYP 'arc' is not a pixel flat",
    ),
  ],
  [
    withFlat("--bad-pixels", SCIENCE),
    /^hatchel: sci_01\.fits: 220 × 150 pixels, but the assembled frame has 200 × 150; a bad-pixel image shows the frame without overscan\.\n$/,
  ],
  [extract(BIAS, "--flat", FLAT), given("bias_01", "a science frame", "its IMAGETYP 'bias' says that it is a bias")],
];

const REDUCED: Misuse[] = [
  [
    byTramlines("in-electrons.fits"),
    /^hatchel: in-electrons\.fits: its unit is 'electron', so it was reduced already, but raw counts \(ADU\) were expected; give the raw frame, or say gain = 1 [^.]*\.\n$/,
  ],
  [
    byTramlines("zeroed.fits"),
    /^hatchel: zeroed\.fits: \d+ % of its pixels are negative .* and it has no overscan, so its zero level was taken off already; give the raw frame, or say bias_level = 0 in the spectrograph file\.\n$/,
  ],
  [
    byTramlines("no-zero.fits"),
    /^hatchel: no-zero\.fits: amplifier 1 has no overscan and no bias frame was given, so its zero level is not known; give --bias, [^.]*\.\n$/,
  ],
  [
    byTramlines("spectra.fits"),
    /^hatchel: spectra\.fits: its unit is 'electron', so it was reduced already, [^.]*\.\n$/,
  ],
  [
    byTramlines("tramlines.fits"),
    /^hatchel: tramlines\.fits: no HDU holds an image of two axes; give a file with an image\.\n$/,
  ],
];

const WINDOWS: Misuse[] = [
  [
    byTramlines("binned.fits"),
    /^hatchel: binned\.fits: .* of another readout window \(sections, axis or binning differ\); trace a flat from the same readout window as the frame\.\n$/,
  ],
  [
    extract("binned.fits", "--flat", FLAT, "--bias", BIAS),
    /^hatchel: bias_01\.fits and binned\.fits come from different readouts \(binning 1 × 1 against 2 × 1\); use frames of the same binning and window\.\n$/,
  ],
  [
    byTramlines("window/raw/sci_01.fits"),
    /^hatchel: sci_01\.fits: 200 × 141 pixels, but tramlines\.fits belong to 200 × 150; trace a flat from the same readout window as the frame\.\n$/,
  ],
  [
    withFlat("--bias", "window/raw/bias_01.fits"),
    /^hatchel: bias_01\.fits and sci_01\.fits come from different readouts \(size 200 × 141 pixels against 200 × 150 pixels; .*\); use frames of the same binning and window\.\n$/,
  ],
  [
    extract(SCIENCE, "--flat", FLAT, "window/raw/fflat_02.fits"),
    /^hatchel: fflat_02\.fits: 200 × 141 pixels of readout window \S+, but fflat_01\.fits has 200 × 150 of \S+; flats must come from the same readout window\.\n$/,
  ],
];

const HEADERS: Misuse[] = [
  [
    byTramlines("gain-0.fits"),
    /^hatchel: gain-0\.fits: amplifier 1: GAIN1 is 0, but a gain over 0 e⁻\/ADU is needed, since every error bar hangs on it; give it in the spectrograph file\.\n$/,
  ],
  [
    byTramlines("gain-missing.fits"),
    /^hatchel: gain-missing\.fits: amplifier 1: the header has no gain, but a gain over 0 e⁻\/ADU is needed, [^.]*; give it in the spectrograph file\.\n$/,
  ],
  [
    byTramlines("overlap.fits"),
    /^hatchel: overlap\.fits: amplifier 1: overscan \[1:20,1:150\] overlaps the data section \[11:210,1:150\]; correct BIASSEC1 or DATASEC1\.\n$/,
  ],
  [
    byTramlines("leaves.fits"),
    /^hatchel: leaves\.fits: DATASEC1: "\[31:230,1:150\]" ends at x = 230, but the image ends at 220; correct it\.\n$/,
  ],
  [
    byTramlines("misplaced.fits"),
    /^hatchel: misplaced\.fits: amplifier 1: data \[21:220,1:150\] has 200 × 150 pixels, but its place \[1:190,1:150\] has 190 × 150; correct CCDSEC1 or the data section\.\n$/,
  ],
  [
    byTramlines("no-section.fits"),
    /^hatchel: no-section\.fits: DATASEC1: "1-200" is not a section; write it as \[x1:x2,y1:y2\]\.\n$/,
  ],
];

/** Changes to the spectrograph file that make its layout contradict the light. */
const LAYOUTS: [from: string, to: string, sentence: RegExp][] = [
  [
    "pitch = 6.1",
    "pitch = 4.9",
    /^hatchel: fflat_01\.fits: neighbouring ribbons of light stand 6\.1\d? px apart \(median of 17\), but the slit layout's pitch is 4\.9 px; correct the pitch in the spectrograph file\.\n$/,
  ],
  [
    "[ 5, 8, 6 ]",
    "[ 5, 8, 5 ]",
    /^hatchel: fflat_01\.fits: light like a fibre's at y = \S+, one pitch beside a fibre, where the slit layout has none; correct the counts of fibres in the blocks in the spectrograph file\.\n$/,
  ],
  [
    "[ 5, 8, 6 ]",
    "[ 6, 8, 5 ]",
    /^hatchel: fflat_01\.fits: .*; correct the counts of fibres in the blocks in the spectrograph file\.\n$/,
  ],
  [
    "dead = [ 9 ]",
    "dead = [ 8 ]",
    /^hatchel: fflat_01\.fits: fibre 8 is listed as dead but has light, and fibre 9 beside it is dark but not listed; correct the list of dead fibres [^.]*\.\n$/,
  ],
  [
    "dead = [ 9 ]",
    "dead = [ 9, 20 ]",
    /^hatchel: layout\.toml: 'slit\.dead' names position 20, but 'slit\.blocks' adds up to 19; positions count from 1\.\n$/,
  ],
  [
    "[ 7, 9.5 ]",
    "[ 7 ]",
    /^hatchel: layout\.toml: 'slit\.gap' lists 1 gaps, but 3 blocks have 2 between them; give one number for each gap, or one for all\.\n$/,
  ],
  [
    "dispersion_axis = 1",
    "dispersion_axis = 2",
    /^hatchel: fflat_01\.fits: wavelength is said to run along axis 2, but the ribbons of light run along axis 1; correct dispersion_axis in layout\.toml\.\n$/,
  ],
  [
    "gain = 1.3",
    "gain = 0",
    /^hatchel: layout\.toml: 'detector\.amplifier\[1\]\.gain' is 0, but a number over 0, in electrons per ADU was expected; correct it or leave the key out\.\n$/,
  ],
  [
    '"[1:20,1:150]"',
    '"[1:40,1:150]"',
    /^hatchel: fflat_01\.fits: amplifier 1: overscan \[1:40,1:150\] overlaps the data section \[21:220,1:150\]; correct layout\.toml: [^.]*, overscan or layout\.toml: [^.]*, data\.\n$/,
  ],
];

const remarks = /^(assumed|warning): .*\n/gm;

describe.each([
  ["a frame in a role that it cannot play", ROLES],
  ["a frame that is not raw", REDUCED],
  ["frames of different readouts", WINDOWS],
  ["a header that cannot be", HEADERS],
])("%s", (_what, misuses) => {
  test.each(misuses)("%j is refused in one sentence", (args, sentence) => refused(args, sentence));
});

describe("a layout that does not fit the light", () => {
  test.each(LAYOUTS)("%s as %s is refused in one sentence", (from, to, sentence) => {
    refused(traceWith(from, to), sentence);
  });

  test("is called out and does no harm where the flat tells better: a fibre listed as dead has light", async () => {
    expect(warned(traceWith("dead = [ 9 ]", "dead = [ 4, 9 ]"))).toEqual([
      "warning: fflat_01.fits: light in fibre 4, listed as dead in the slit layout; correct the list if the light is real.",
    ]);
    const { state } = await readTramlines(join(cwd, "out.fits"));
    expect([state[3], state[8]]).toEqual(["lit", "dead"]);
  });

  test("is called out where a fibre that should be lit is dark", async () => {
    const [warning, ...more] = warned(traceWith("dead = [ 9 ]", "dead = []"));
    expect(more).toEqual([]);
    expect(warning).toMatch(/^warning: fflat_01\.fits: no light in fibre 9, not listed as dead in the slit layout; /);
    expect((await readTramlines(join(cwd, "out.fits"))).state[8]).toBe("dead");
  });
});

describe("a header that the pixels do not contradict", () => {
  test("is used as it is, with a warning of a wrong read noise", () => {
    const [warning, ...more] = warned(traceWith("read_noise = 3.1", "read_noise = 9"));
    expect(more).toEqual([]);
    expect(warning).toMatch(
      /^warning: fflat_01\.fits: the read noise of amplifier 1 is given as 9 e⁻, but 3\.\d+ ± 0\.\d+ e⁻ is measured; .*\.$/,
    );
  });

  test("a science frame that calls itself a flat does not pass for one unremarked", () => {
    const said = warned(["trace", "says-flat.fits", "-o", "says-flat-lines.fits", ...KNOWN]).join("\n");
    expect(said).toMatch(
      /says-flat\.fits: its fibres are very unequal .*, as in a science frame; make sure that this is a fibre flat\./,
    );
    refused(
      extract("says-science.fits", "--flat", "says-flat.fits", ...KNOWN),
      /^hatchel: says-science\.fits: light in fibres .* dead in the flat that was traced; .*so trace a flat in which every lit fibre shines\.\n$/,
    );
  });
});

/** Trace with the layout changed in one place. */
function traceWith(from: string, to: string): string[] {
  const toml = readFileSync(join(cwd, "night/spectrograph.toml"), "utf8");
  expect(toml.split(from)).toHaveLength(2);
  writeFileSync(join(cwd, "night/layout.toml"), toml.replace(from, to));
  return ["trace", FLAT, "-o", "out.fits", "--spectrograph", "night/layout.toml"];
}

function refused(args: string[], sentence: RegExp): void {
  const before = readdirSync(cwd).sort();
  const run = hatchel(args, { cwd });
  expect(run.stderr.replace(remarks, "")).toMatch(sentence);
  expect(run).toMatchObject({ code: 1, stdout: "" });
  expect(readdirSync(cwd).sort()).toEqual(before);
}

/** The warnings of a run that gives its product all the same. */
function warned(args: string[]): string[] {
  const run = hatchel(args, { cwd });
  expect(run.code, run.stderr).toBe(0);
  return lines(run.stderr).filter((line) => line.startsWith("warning: "));
}
