import { mkdtemp, rm, writeFile } from "node:fs/promises";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { describe, expect, it } from "vitest";
import { editDistance, nearestKey } from "../src/nearestKey.js";
import { spectrographToml } from "../src/simulate/files.js";
import { parseScene } from "../src/simulate/scene.js";
import { SCENES } from "../src/simulate/scenes.js";
import { parseSpectrograph, readSpectrograph } from "../src/spectrograph.js";

const FULL = `
name = "bench, red arm"
[detector]
dispersion_axis = 2
saturation = 61234
bad_pixels = "masks/bad.fits"
[[detector.amplifier]]
gain = 1.18
read_noise = 2.9
data = "[33:1056,1:910]"
overscan = "[1:32,1:910]"
overscan_skip = 3
place = "[1:1024,1:910]"
[[detector.amplifier]]
gain = 1.24
overscan = ["[2081:2112,1:910]", "[1:4,1:910]"]
bias_level = -2.5
[slit]
blocks = [24, 23]
pitch = 4.9
gap = [4.6]
dead = [10, 47]
sky = [3]
[wavelength]
medium = "air"
range = [7390, 5600]
lamps = ["Ne", "Ar"]
lines = "arcs/lines.txt"
`;

const parse = (text: string) => parseSpectrograph(text, { file: "bench.toml", folder: "/data/night" });
/** The message of the error that `text` gives. */
function complaint(text: string): string {
  try {
    parse(text);
  } catch (error) {
    return `${(error as Error).name}: ${(error as Error).message}`;
  }
  return "no complaint";
}

describe("spectrograph file", () => {
  it("reads every key", () => {
    expect(parse(FULL)).toEqual({
      file: "bench.toml",
      name: "bench, red arm",
      detector: {
        dispersionAxis: 2,
        saturationAdu: 61234,
        badPixels: "/data/night/masks/bad.fits",
        amplifiers: [
          {
            gain: 1.18,
            readNoise: 2.9,
            data: "[33:1056,1:910]",
            overscan: ["[1:32,1:910]"],
            overscanSkip: 3,
            place: "[1:1024,1:910]",
          },
          { gain: 1.24, overscan: ["[2081:2112,1:910]", "[1:4,1:910]"], biasLevelAdu: -2.5 },
        ],
      },
      slit: { blocks: [24, 23], pitch: 4.9, gap: [4.6], dead: [10, 47], sky: [3] },
      wavelength: { medium: "air", range: [7390, 5600], lamps: ["Ne", "Ar"], lines: "/data/night/arcs/lines.txt" },
    });
  });

  it("needs no key at all", () => {
    expect(parse("")).toEqual({ file: "bench.toml", detector: { amplifiers: [] } });
  });

  it("reads which fibres belong to which target", () => {
    const text = '[slit]\nblocks = [5, 6]\n[slit.targets]\n"star A" = [7, 5, 6]\nM31 = [2]\n';
    const { slit } = parseSpectrograph(text, { file: "bench.toml", folder: "." });
    expect(slit?.targets).toEqual([
      { name: "star A", fibres: [7, 5, 6] },
      { name: "M31", fibres: [2] },
    ]);
  });

  it("takes paths from the file's own folder", async () => {
    const folder = await mkdtemp(join(tmpdir(), "spectrograph-"));
    try {
      await writeFile(join(folder, "s.toml"), '[detector]\nbad_pixels = "bad.fits"\n');
      const read = await readSpectrograph(join(folder, "s.toml"));
      expect(read.detector.badPixels).toBe(join(folder, "bad.fits"));
      expect(read.file).toBe("s.toml");
      await expect(readSpectrograph(join(folder, "none.toml"))).rejects.toThrow(
        /none\.toml: there is no such file, but a spectrograph file in TOML was expected; check its name\./,
      );
    } finally {
      await rm(folder, { recursive: true });
    }
  });

  it.each(Object.keys(SCENES) as (keyof typeof SCENES)[])("reads what the simulator writes for '%s'", (name) => {
    const scene = parseScene(SCENES[name], name);
    const read = parse(spectrographToml(scene));
    expect(read.detector.amplifiers.map((entry) => entry.gain)).toEqual(scene.detector.amplifier.map((a) => a.gain));
    expect(read.slit?.blocks).toEqual(scene.slit.blocks);
  });

  it.each([
    ["[detektor]\n", "bench.toml: unknown key 'detektor'; did you mean 'detector'?"],
    [
      "[detector]\ndispersionaxis = 1\n",
      "bench.toml: unknown key 'detector.dispersionaxis'; did you mean 'dispersion_axis'?",
    ],
    [
      "[[detector.amplifier]]\n[[detector.amplifier]]\nreadnoise = 3\n",
      "bench.toml: unknown key 'detector.amplifier[2].readnoise'; did you mean 'read_noise'?",
    ],
    [
      "[slit]\ncolour = 1\n",
      "bench.toml: unknown key 'slit.colour'; known there: blocks, pitch, gap, dead, sky, targets.",
    ],
    [
      "[[detector.amplifier]]\ngain = 0\n",
      "bench.toml: 'detector.amplifier[1].gain' is 0, but a number over 0, in electrons per ADU was expected; correct it or leave the key out.",
    ],
    [
      '[[detector.amplifier]]\ndata = "[1:10,1]"\n',
      `bench.toml: 'detector.amplifier[1].data' is "[1:10,1]", but a FITS section such as "[33:1056,1:910]" was expected; correct it or leave the key out.`,
    ],
    [
      '[[detector.amplifier]]\noverscan = "[20:10,1:5]"\n',
      `bench.toml: 'detector.amplifier[1].overscan' is "[20:10,1:5]", but a FITS section such as "[1:32,1:910]", or a list of them was expected; correct it or leave the key out.`,
    ],
    [
      "[detector]\ndispersion_axis = 3\n",
      "bench.toml: 'detector.dispersion_axis' is 3, but 1 or 2 was expected; correct it or leave the key out.",
    ],
    [
      'detector = "red"\n',
      `bench.toml: 'detector' is "red", but a table was expected; correct it or leave the key out.`,
    ],
    [
      "[slit]\ndead = [0]\n",
      "bench.toml: 'slit.dead[1]' is 0, but a list of slit positions, counted from 1 was expected; correct it or leave the key out.",
    ],
    [
      '[wavelength]\nmedium = "water"\n',
      `bench.toml: 'wavelength.medium' is "water", but "air" or "vacuum" was expected; correct it or leave the key out.`,
    ],
    [
      "[slit]\nblocks = [5, 6]\ngap = [1, 2]\n",
      "bench.toml: 'slit.gap' lists 2 gaps, but 2 blocks have 1 between them; give one number for each gap, or one for all.",
    ],
    [
      '[slit]\nblocks = [5, 6]\ntargets = { "star A" = [3, 12] }\n',
      "bench.toml: 'slit.targets.star A' names position 12, but 'slit.blocks' adds up to 11; positions count from 1.",
    ],
    [
      "[slit.targets]\nA = [3, 4, 3]\n",
      "bench.toml: 'slit.targets.A' names position 3 twice, but a fibre counts once in a sum; leave one out.",
    ],
    [
      "[slit.targets]\nA = [3, 0]\n",
      "bench.toml: 'slit.targets.A[2]' is 0, but a list of slit positions, counted from 1 was expected; correct it or leave the key out.",
    ],
    [
      '[slit.targets]\n"é" = [3]\n',
      "bench.toml: 'slit.targets' has a target called 'é', but 1 to 68 characters of plain ASCII were expected; rename it.",
    ],
    [
      "[slit]\nblocks = [5, 6]\nsky = [12]\n",
      "bench.toml: 'slit.sky' names position 12, but 'slit.blocks' adds up to 11; positions count from 1.",
    ],
  ])("complains of %j", (text, message) => {
    expect(complaint(text)).toBe(`SpectrographError: ${message}`);
  });

  it("names the line of broken TOML", () => {
    expect(complaint("[slit]\npitch = = 2\n")).toMatch(
      /^SpectrographError: bench\.toml, line 2: not valid TOML \(.+\); correct that line\.$/,
    );
  });
});

describe("nearest key", () => {
  it("counts edits (kitten → sitting is 3, the textbook example of Levenshtein's distance, from memory)", () => {
    expect(editDistance("kitten", "sitting")).toBe(3);
    expect(editDistance("gain", "")).toBe(4);
  });

  it("prefers the nearer of two and knows when none is near", () => {
    expect(nearestKey("plase", ["data", "place", "gain"])).toBe("place");
    expect(nearestKey("temperature", ["data", "place", "gain"])).toBe(undefined);
  });
});
