/** The plan's keys are strict: whatever is misspelt, missing or said twice is refused in one sentence that helps. */
import { rmSync, writeFileSync } from "node:fs";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { parsePlan, readPlan } from "../../src/night/plan.js";
import { PLAN_KEYS, planKeyLines, planSchema } from "../../src/night/planKeys.js";
import { freshFolder } from "./frames.js";

let folder: string;
const NAMES = ["b1.fits", "b2.fits", "f.fits", "s1.fits", "s2.fits.gz", "s1.fits.fz"];

beforeAll(() => {
  folder = freshFolder();
  for (const name of [...NAMES, "mask.fits"]) writeFileSync(join(folder, name), "");
});
afterAll(() => rmSync(folder, { recursive: true }));

const parse = (text: string) => parsePlan(text, { file: "night.toml", folder });
const FLAT = '[frames]\nfibre_flat = ["f.fits"]\n';

test("takes names from the plan's folder, and defaults for what is left out", () => {
  const plan = parse(`bad_pixels = "mask.fits"
${FLAT}bias = ["b1.fits", "b2.fits"]
[[object]]
name = "field"
frames = ["s1.fits"]
[wanted]
method = "boxcar"
half_aperture = 2
`);
  expect(plan.frames.bias).toEqual([join(folder, "b1.fits"), join(folder, "b2.fits")]);
  expect(plan.badPixels).toBe(join(folder, "mask.fits"));
  expect(plan.objects).toMatchObject([{ name: "field", frames: [join(folder, "s1.fits")] }]);
  expect(plan.wanted).toMatchObject({ method: "boxcar", halfAperture: 2, crosstalk: true, cosmicRays: true });
});

describe("refuses, in one sentence,", () => {
  test.each([
    ["a key that is near another", "[wanted]\nmetod = 'joint'", "unknown key 'wanted.metod'; did you mean 'method'?"],
    [
      "a role that is near another",
      "[frames]\nfiber_flat = ['f.fits']",
      "'frames.fiber_flat'; did you mean 'fibre_flat'?",
    ],
    ["a key in the wrong table", "method = 'joint'", /unknown key 'method'; known there: name, folder, /],
    [
      "a wrong kind of value",
      "[frames]\nbias = 'b1.fits'",
      /'frames.bias' is "b1.fits", but a list of file names was expected/,
    ],
    ["a list that is empty", "[frames]\nbias = []", /'frames.bias' is \[\], but a list of file names was expected/],
    ["a word that is none of the choices", "[wanted]\nmethod = 'best'", /"joint", "optimal" or "boxcar" was expected/],
    [
      "an object without a name",
      `${FLAT}[[object]]\nframes = ['s1.fits']`,
      "'object[1].name' is missing; add a string.",
    ],
    ["a broken line", "[frames\n", /night.toml, line 1: not valid TOML \(.*\); correct that line\.$/],
    [
      "a frame that is not there",
      "[frames]\nfibre_flat = ['g.fits']",
      /'frames.fibre_flat' names .*g\.fits, but there is no such file/,
    ],
    [
      "a frame in two roles",
      `${FLAT}bias = ['f.fits']`,
      /f\.fits: it stands in 'frames.bias' and in 'frames.fibre_flat'/,
    ],
    ["a frame named twice", `${FLAT}bias = ['b1.fits', 'b1.fits']`, /b1\.fits: 'frames.bias' names it twice/],
    [
      "products of one name",
      `${FLAT}[[object]]\nname = 'a'\nframes = ['s1.fits', 's1.fits.fz']`,
      /would both be called s1; rename one/,
    ],
    [
      "two objects of one name",
      `${FLAT}[[object]]\nname = 'a'\nframes = ['s1.fits']\n[[object]]\nname = 'a'\nframes = ['s2.fits.gz']`,
      "two objects are called 'a'",
    ],
    [
      "no fibre flat",
      "[frames]\nbias = ['b1.fits']\n[[object]]\nname = 'a'\nframes = ['s1.fits']",
      "the plan names no fibre flat, and",
    ],
    [
      "joint that leaves cross-talk in",
      `${FLAT}[wanted]\ncrosstalk = false`,
      /'wanted.crosstalk' is false, but joint always parts/,
    ],
    ["an aperture for a method without", `${FLAT}[wanted]\nhalf_aperture = 2`, /the boxcar's, but the method is joint/],
  ])("%s", (_what, text, message) => {
    const refusal = refused(text);
    expect(refusal).toMatch(/^night\.toml[:,] /);
    expect(refusal).not.toContain("\n");
    if (message instanceof RegExp) expect(refusal).toMatch(message);
    else expect(refusal).toContain(message);
  });

  test.each([
    ["[wavelength]\nlamps = ['Ne']", "", /but s\.toml has no 'wavelength\.range'; add it, so that/],
    ["[wavelength]\nrange = [5, 6]", "", /but s\.toml has no 'wavelength\.lamps'; add it, so that/],
    [
      "[wavelength]\nrange = [5, 6]\nlamps = ['Ne']",
      "[wanted]\nthroughput = 'twilight'",
      /"twilight", but there is none/,
    ],
    [
      "[wavelength]\nrange = [5, 6]\nlamps = ['Ne']",
      "[[object]]\nname = 'a'\nframes = ['s1.fits']\nsky = 'on'",
      /taken off 'a', but fewer than two sky fibres/,
    ],
  ])("what the spectrograph file %j lacks", async (spectrograph, plan, message) => {
    writeFileSync(join(folder, "s.toml"), spectrograph);
    writeFileSync(join(folder, "night.toml"), `spectrograph = "s.toml"\n${FLAT}arc = ["b1.fits"]\n${plan}\n`);
    await expect(readPlan(join(folder, "night.toml"))).rejects.toThrow(message);
  });

  test("a mask that the spectrograph file names, but that is not there", async () => {
    writeFileSync(join(folder, "night.toml"), `spectrograph = "s.toml"\n${FLAT}`);
    writeFileSync(join(folder, "s.toml"), '[detector]\nbad_pixels = "gone.fits"\n');
    await expect(readPlan(join(folder, "night.toml"))).rejects.toThrow(
      /^night\.toml: 'detector\.bad_pixels' of s\.toml names .*gone\.fits, but/,
    );
    writeFileSync(join(folder, "s.toml"), '[detector]\nbad_pixels = "mask.fits"\n');
    expect((await readPlan(join(folder, "night.toml"))).badPixels).toBe(join(folder, "mask.fits"));
  });

  test("a plan that is not there", async () => {
    await expect(readPlan(join(folder, "no.toml"))).rejects.toThrow(
      /no\.toml: there is no such file, .*'hatchel plan' writes one/,
    );
    await expect(readPlan(folder)).rejects.toThrow(/this is a folder, but a night plan in TOML was expected/);
  });
});

test("every key of the schema is documented, and no other", () => {
  const shape = planSchema.shape;
  const inner = (key: "frames" | "wanted") => Object.keys(shape[key].unwrap().shape);
  expect(Object.keys(PLAN_KEYS[""])).toEqual(Object.keys(shape));
  expect(Object.keys(PLAN_KEYS.frames)).toEqual(inner("frames"));
  expect(Object.keys(PLAN_KEYS.wanted)).toEqual(inner("wanted"));
  expect(Object.keys(PLAN_KEYS.object)).toEqual(Object.keys(shape.object.unwrap().element.shape));
  expect(planKeyLines().join("\n")).toMatch(/^trust_names +.*another fibre's number.*true or false$/m);
});

function refused(text: string): string {
  try {
    parse(text);
  } catch (error) {
    expect((error as Error).name).toBe("PlanError");
    return (error as Error).message;
  }
  throw new Error("it was taken");
}
