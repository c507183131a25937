/** A whole night of the independent forward model, when it lies beside the project: raw frames to spectra with wavelengths,
 * without sky, against that model's truth. */
import { existsSync, rmSync, symlinkSync, writeFileSync } from "node:fs";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { readProduct } from "../../src/calibration/spectraProduct.js";
import { readImage } from "../../src/fits/image.js";
import { readPlan } from "../../src/night/plan.js";
import { planText } from "../../src/night/planText.js";
import { proposePlan } from "../../src/night/proposal.js";
import { type NightOutcome, runNight } from "../../src/night/run.js";
import { MAKERS } from "../../src/night/stages.js";
import { median } from "../../src/reference/median.js";
import { freshFolder } from "./frames.js";

const NIGHT = new URL("../../../shared/frames/night/", import.meta.url).pathname;
const here = existsSync(NIGHT);
if (!here) console.log("the night beside the project is not there: its tests are skipped");

/** What scene.json says, as an observer would write it. */
const SPECTROGRAPH = `
[slit]
blocks = [21, 21, 21, 21]
pitch = 5.1
gap = 4.2
dead = [13, 66]
sky = [3, 11, 19, 27, 35, 42, 50, 58, 65, 73, 81]
[wavelength]
range = [5800, 7430]
lamps = ["Ne", "Ar", "Hg", "Cu"]
`;
const FRAMES = ["sci_01", "sci_02", "sci_03"];
/** README of the frames: pixels against arc_01. */
const X_SHIFTS = [-0.075, -0.03, 0.115];

describe.skipIf(!here)("the night", () => {
  let folder: string;
  let outcome: NightOutcome;

  beforeAll(async () => {
    folder = freshFolder();
    symlinkSync(join(NIGHT, "raw"), join(folder, "raw"));
    symlinkSync(join(NIGHT, "badmask.fits"), join(folder, "badmask.fits"));
    writeFileSync(join(folder, "spectrograph.toml"), SPECTROGRAPH);
    writeFileSync(join(folder, "night.toml"), planText(await proposePlan(join(folder, "raw")), folder));
    const plan = await readPlan(join(folder, "night.toml"));
    const make = async (job: Parameters<Awaited<ReturnType<(typeof MAKERS)[string]>>>[0]) =>
      (await MAKERS[job.stage]())(job);
    outcome = await runNight(plan, join(folder, "out"), { version: "0", atOnce: 1, make });
  }, 300_000);
  afterAll(() => rmSync(folder, { recursive: true }));

  test("is made whole, and its frames are good", () => {
    expect(outcome.summary.nFailed).toBe(0);
    expect(outcome.summary.frames.map(({ frame, verdict, reasons }) => [frame, verdict, reasons])).toEqual(
      FRAMES.map((name) => [`${name}.fits`, "good", []]),
    );
    expect(outcome.summary.derived.map(({ product }) => product)).toEqual(["field-3.combined.fits"]);
  });

  test("has the zero points that the frames were given", () => {
    outcome.summary.frames.forEach(({ zeroPointPixels }, i) => {
      expect(Math.abs(zeroPointPixels! - X_SHIFTS[i])).toBeLessThan(0.02);
    });
  });

  test.each(FRAMES)("%s: wavelengths are the truth's", async (name) => {
    const { wavelengths, sky } = await readProduct(join(folder, "out", `${name}.spectra.fits`));
    const truth = (await readImage(join(NIGHT, `truth/${name}.fits.gz`), { hdu: "WAVE" })).data;
    const off = Array.from(truth, (wave, i) => Math.abs(wavelengths!.image[i] - wave)).filter(Number.isFinite);
    expect(off.length).toBe(82 * 1024);
    // Common practice: 0.05 px is a good wavelength fit; 1.6 Å a pixel.
    expect(median(off)).toBeLessThan(0.05 * 1.6);
    expect(sky).toBeDefined();
  });

  test("combined spectra reach further than those of one frame", async () => {
    const [{ facts }] = outcome.summary.derived;
    const one = median(outcome.summary.frames.map(({ medianSignalToNoise }) => medianSignalToNoise!));
    // √3 = 1.73 for three alike.
    expect(facts.medianSignalToNoise as number).toBeGreaterThan(1.6 * one);
    expect(facts.medianSignalToNoise as number).toBeLessThan(1.85 * one);
  });
});
