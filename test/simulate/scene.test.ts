import { mkdtempSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import fc from "fast-check";
import { describe, expect, test } from "vitest";
import { parseScene, readScene } from "../../src/simulate/scene.js";
import { SceneError } from "../../src/simulate/sceneMessages.js";
import { SCENES } from "../../src/simulate/scenes.js";
import { sceneText } from "./benches.js";

function complaint(text: string): string {
  try {
    parseScene(text, "s.toml");
  } catch (error) {
    expect(error).toBeInstanceOf(SceneError);
    return (error as Error).message;
  }
  return "no complaint";
}

describe("scenes", () => {
  test("those in the package are valid, and the clean one is clean", () => {
    expect(parseScene(SCENES.demo, "demo").exposure.map((exposure) => exposure.kind)).toEqual([
      ...["bias", "bias", "detector-flat", "detector-flat", "fibre-flat", "fibre-flat", "arc", "science", "science"],
    ]);
    const clean = parseScene(`${SCENES.clean}\n[cosmic_rays]\nrate = 50`, "clean");
    expect(clean.cosmic_rays).toBe(undefined);
    expect(parseScene(SCENES.demo, "demo").cosmic_rays?.rate).toBe(180);
    expect([clean.profile.wing_share, clean.profile.second_share, clean.detector.response_rms]).toEqual([0, 0, 0]);
  });

  test.each([
    [
      "a negative gain",
      sceneText({}).replace("gain = 1.3", "gain = -1"),
      "s.toml: detector.amplifier[1].gain: found -1, expected more than 0; correct the value",
    ],
    [
      "a missing range",
      sceneText({}).replace("range = [5500, 6500]", ""),
      "s.toml: wavelength.range: missing, expected a list; add it",
    ],
    [
      "a misspelt key",
      sceneText({}).replace("pitch", "ptich"),
      "s.toml: slit.pitch: missing, expected a number; add it (and 1 more like it)",
    ],
    [
      "an unknown key",
      sceneText({}).replace("pitch", "colour = 1\npitch"),
      "s.toml: slit: found the unknown key colour; correct the spelling or leave it out",
    ],
    [
      "a dead fibre too many",
      sceneText({}).replace("gap = 8", "gap = 8\ndead = [17]"),
      "s.toml: slit.dead: found fibre 17, but slit.blocks has 16 positions; correct one of them",
    ],
    [
      "gaps that do not fit",
      sceneText({}).replace("gap = 8", "gap = [8, 9]"),
      "s.toml: slit.gap: found 2 gaps, but 2 blocks have 1 between them; give one number or one a gap",
    ],
    [
      "amplifiers that leave pixels out",
      sceneText({}).replace("overscan = 20", 'overscan = 20\nplace = "[1:100,1:121]"'),
      "s.toml: detector.amplifier: the places cover 12100 of 18150 pixels; every pixel belongs to one amplifier",
    ],
    [
      "a wavelength that turns round",
      sceneText({}).replace("range = [5500, 6500]", "range = [5500, 6500]\ncurve = 400"),
      "s.toml: wavelength.curve: the wavelength turns round at column 2; make curve and cubic smaller against the range",
    ],
    [
      "two exposures of one name",
      sceneText({}).replace(/\[\[exposure[\s\S]*/, (text) => text + text),
      "s.toml: exposure[2].name: sci_01 is taken already; give each exposure a name of its own",
    ],
    [
      "a kind that is none",
      sceneText({}).replace('"science"', '"sience"'),
      's.toml: exposure[1].kind: found "sience", expected one of "bias"|"dark"|"detector-flat"|"fibre-flat"|"arc"|"twilight"|"science"; correct the value',
    ],
    [
      "a dark without time",
      sceneText({}).replace('"science"\nseconds = 900', '"dark"'),
      "s.toml: exposure[1].seconds: found 0 for a dark; only a bias takes no time",
    ],
    [
      "a name that no FITS header holds",
      sceneText({}).replace("test bench", "Prüfstand"),
      's.toml: name: found "Prüfstand", expected plain ASCII, since it goes into FITS headers; correct the value',
    ],
    [
      "a level beyond all counting",
      `${sceneText({})}\n[science]\nlevels = [1e12]`,
      "s.toml: science.levels[1]: found 1000000000000, expected at most 1000000000; correct the value",
    ],
    [
      "a name that is a path",
      sceneText({}).replace('"sci_01"', '"../x"'),
      's.toml: exposure[1].name: found "../x", expected a file name of letters, digits, _ and -; correct the value',
    ],
  ])("%s is called by its place", (_what, text, message) => {
    expect(complaint(text)).toBe(message);
  });

  test("text that is no TOML is called by line and column", () => {
    expect(complaint('name = "x"\nseed = = 3')).toMatch(
      /^s\.toml: line 2, column \d+: not valid TOML \(.+\); correct that line$/,
    );
  });

  test("a file that is not there", () => {
    const folder = mkdtempSync(join(tmpdir(), "scene-"));
    expect(() => readScene(join(folder, "no.toml"))).toThrow(
      /no\.toml: there is no such file; give the path of a scene in TOML$/,
    );
    expect(() => readScene(folder)).toThrow(/: is a folder; give the path of a scene in TOML$/);
  });

  test("whatever is done to a scene's text, the answer is a scene or one line that names the file", () => {
    const pieces = fc.constantFrom(
      "=",
      "[",
      "]]",
      "nan",
      "inf",
      "-1",
      "1e400",
      '"',
      "\n",
      "9999999999999999999",
      "[]",
      "0",
      "\u0000",
      "true",
      "1979-05-27",
    );
    const edit = fc.tuple(fc.nat(), fc.nat({ max: 12 }), pieces);
    let refused = 0;
    fc.assert(
      fc.property(fc.array(edit, { minLength: 1, maxLength: 3 }), (edits) => {
        let text = SCENES.demo;
        for (const [at, length, piece] of edits) {
          const start = at % text.length;
          text = text.slice(0, start) + piece + text.slice(start + length);
        }
        const message = complaint(text);
        if (message === "no complaint") return;
        refused++;
        expect(message).toMatch(/^s\.toml: [^\n]{10,400}$/);
      }),
      { numRuns: 400 },
    );
    expect(refused).toBeGreaterThan(100);
  });
});
