/** Frames of an independent forward model, when they lie beside the project: what the scene says must be measured, and
 * the variances must be those that the frames scatter by. */
import { existsSync, readFileSync } from "node:fs";
import { describe, expect, it } from "vitest";
import { clippedScatter } from "../../src/detector/clip.js";
import { correctFrame } from "../../src/detector/correct.js";
import { MaskBit } from "../../src/detector/frame.js";
import { loadCalibrations } from "../../src/detector/loadCalibrations.js";
import { lookAt } from "../../src/detector/look.js";
import { measureNoise } from "../../src/detector/noise.js";
import { readImage } from "../../src/fits/image.js";
import { momentsOf } from "./rawFrames.js";

const FRAMES = new URL("../../../shared/frames/", import.meta.url).pathname;
const here = existsSync(FRAMES);
if (!here) console.log("frames beside the project are not there: their tests are skipped");

const path = (scene: string, name: string) => `${FRAMES}${scene}/raw/${name}.fits`;
const series = (scene: string, kind: string, from: number, to: number) =>
  Array.from({ length: to - from + 1 }, (_, i) => path(scene, `${kind}_0${from + i}`));
const readAll = (files: string[]) => Promise.all(files.map((file) => readImage(file)));

interface SceneTruth {
  detector: { amplifiers: { gain_e_per_adu: number; rdnoise_e: number }[] };
  slit: { positions: number; dead: number[] };
}
const truthOf = (scene: string): SceneTruth => JSON.parse(readFileSync(`${FRAMES}${scene}/scene.json`, "utf8"));
/** Read noise as it shows in whole counts: the converter adds a twelfth of a count squared. */
const shown = ({ gain_e_per_adu: gain, rdnoise_e: noise }: SceneTruth["detector"]["amplifiers"][0]) =>
  Math.sqrt(noise ** 2 + gain ** 2 / 12);

describe.skipIf(!here).each(["crowded", "night"])("frames '%s'", (scene) => {
  const night = scene === "night";

  it("gain and read noise are the scene's, from fibre flats (which moved) and from detector flats", async () => {
    const truth = truthOf(scene).detector.amplifiers;
    const bias = await readAll(series(scene, "bias", 1, 2));
    for (const kind of ["dflat", "fflat"]) {
      const measured = measureNoise({ bias, flats: await readAll(series(scene, kind, 1, 2)) });
      expect(measured.disagreements).toEqual([]);
      measured.amplifiers.forEach(({ gain, readNoise }, k) => {
        expect(Math.abs(gain!.value - truth[k].gain_e_per_adu)).toBeLessThan(4 * gain!.error);
        expect(gain!.error / gain!.value).toBeLessThan(0.005);
        expect(Math.abs(readNoise!.value - shown(truth[k]))).toBeLessThan(4 * readNoise!.error);
      });
    }
  });

  it("a bias corrected by the others is 0, and scatters by its variance", async () => {
    const last = night ? 5 : 3;
    const calibrations = await loadCalibrations({ bias: series(scene, "bias", 1, last - 1) });
    expect(calibrations.warnings).toEqual([]);
    const raw = await readImage(path(scene, `bias_0${last}`));
    const frame = correctFrame(raw, calibrations, undefined, { role: "bias" });
    expect(frame.warnings).toEqual([]);
    const truth = truthOf(scene).detector.amplifiers;
    truth.forEach((amplifier, k) => {
      const from = (k * frame.nx) / truth.length;
      const to = ((k + 1) * frame.nx) / truth.length;
      const own = frame.electrons.filter((_, at) => at % frame.nx >= from && at % frame.nx < to);
      const variance = frame.noise.fixedVarianceImage!.filter((_, at) => at % frame.nx >= from && at % frame.nx < to);
      const { mean, sigma, n } = momentsOf(own.map((value, at) => value / Math.sqrt(variance[at])));
      // The overscan's level has errors of its own, shared by rows: some twenty independent ones at 0.05 σ.
      expect(Math.abs(mean)).toBeLessThan(0.04);
      expect(Math.abs(sigma / (shown(amplifier) / amplifier.rdnoise_e) - 1)).toBeLessThan(0.004 + 4 / Math.sqrt(2 * n));
    });
  });

  it("a detector flat corrected by the others is even to its noise", async () => {
    const last = night ? 2 : 4;
    const files = { bias: series(scene, "bias", 1, night ? 5 : 3), pixelFlat: series(scene, "dflat", 1, last - 1) };
    const calibrations = await loadCalibrations({ ...files, badPixels: `${FRAMES}${scene}/badmask.fits` });
    expect(calibrations.warnings).toEqual([]);
    const frame = correctFrame(await readImage(path(scene, `dflat_0${last}`)), calibrations);
    const { electrons, noise, mask, nx } = frame;
    const differences: number[] = [];
    const uncorrected: number[] = [];
    for (let at = 0; at + 1 < electrons.length; at += 2) {
      if (mask[at] || mask[at + 1]) continue;
      const m = (electrons[at] + electrons[at + 1]) / 2;
      const variance = (i: number) =>
        noise.fixedVarianceImage![i] + m * noise.inverseResponse![i] + noise.responseRelativeVariance![i] * m * m;
      const sigma = Math.sqrt(variance(at) + variance(at + 1));
      differences.push((electrons[at] - electrons[at + 1]) / sigma);
      const raw = (i: number) => electrons[i] / noise.inverseResponse![i];
      uncorrected.push((raw(at) - raw(at + 1)) / sigma);
    }
    expect(nx % 2).toBe(0);
    const { sigma, n } = clippedScatter(differences);
    expect(Math.abs(sigma - 1)).toBeLessThan(0.005 + 4 / Math.sqrt(2 * n));
    // Without the response, its 1 % at some 30 000 e⁻ would show: √(1 + (0.01·√(30 000/(1 + 1/n)))²) is over 1.4.
    expect(clippedScatter(uncorrected).sigma).toBeGreaterThan(1.4);
  });

  it("a look counts the lit fibres", async () => {
    const { positions, dead } = truthOf(scene).slit;
    const report = await lookAt(path(scene, "fflat_01"));
    expect([report.kind, report.dispersionAxisSeen, report.ribbons!.count]).toEqual([
      "fibre flat",
      1,
      positions - dead.length,
    ]);
    expect(report.warnings).toEqual([]);
  });
});

describe.skipIf(!here)("dark frames of the night", () => {
  it("add no noise: fixed variance is read noise and dark, and the third dark scatters by it", async () => {
    const files = { bias: series("night", "bias", 1, 5), dark: series("night", "dark", 1, 2) };
    const calibrations = await loadCalibrations({ ...files, badPixels: `${FRAMES}night/badmask.fits` });
    const frame = correctFrame(await readImage(path("night", "dark_03")), calibrations);
    const variance = frame.noise.fixedVarianceImage!;
    // 3.7² + 900 s · 0.0015 e⁻/s = 15.04 e⁻²; pixel by pixel the two darks added half of that and more.
    const median = variance.slice().sort()[variance.length >> 1];
    expect(median).toBeGreaterThan(15.0);
    expect(median).toBeLessThan(15.4);
    const good = (_: number, at: number) => frame.mask[at] === 0;
    const pulls = frame.electrons.map((value, at) => value / Math.sqrt(variance[at])).filter(good);
    // Whole counts add 1.42²/12 e⁻² to what the header's read noise says: 0.6 % in σ.
    const { mean, sigma } = clippedScatter(pulls);
    expect(Math.abs(sigma - 1.006)).toBeLessThan(0.006);
    expect(Math.abs(mean)).toBeLessThan(0.04);
    const hot = pulls.filter((_, at) => calibrations.dark!.own[at] === 1);
    expect(hot.length).toBeGreaterThan(100);
    expect(hot.length).toBeLessThan(0.005 * pulls.length);
  });
});

describe.skipIf(!here)("the seam between the two amplifiers", () => {
  it.each(["dflat_01", "fflat_01"])(
    "of %s shows no step, and 3 % when one gain is given 3 % too large",
    async (name) => {
      const right = await lookAt(path("crowded", name));
      expect(right.seams.map(({ before, after, axis, at }) => [before, after, axis, at])).toEqual([[1, 2, "x", 1024]]);
      expect(Math.abs(right.seams[0].step.value)).toBeLessThan(0.002);
      expect(right.warnings).toEqual([]);
      const amplifiers = truthOf("crowded").detector.amplifiers.map(({ gain_e_per_adu: gain }, k) => ({
        gain: k === 0 ? gain : 1.03 * gain,
      }));
      const wrong = await lookAt(path("crowded", name), { file: "s.toml", detector: { amplifiers } });
      expect(Math.abs(wrong.seams[0].step.value - 0.03)).toBeLessThan(0.002);
      expect(wrong.warnings.filter((text) => text.includes("at the seam between them"))).toHaveLength(1);
    },
  );
});

describe.skipIf(!here)("frames to be survived", () => {
  const night = loadOnce(() =>
    loadCalibrations({
      bias: series("night", "bias", 1, 5),
      dark: series("night", "dark", 1, 3),
      pixelFlat: series("night", "dflat", 1, 2),
    }),
  );
  const corrected = async (name: string) => correctFrame(await readImage(`${FRAMES}ugly/${name}`), await night());
  const count = (mask: Uint8Array, bit: number) => mask.reduce((sum, bits) => sum + (bits & bit ? 1 : 0), 0);

  it.each([
    [
      "axis2.fits",
      'axis2.fits: DATASEC: "[1:1024,1:476]" ends at x = 1024, but the image ends at 476; it would fit with the axes exchanged',
    ],
    ["cropped.fits", 'cropped.fits: DATASEC: "[1:1024,1:476]" ends at y = 476, but the image ends at 430; correct it.'],
    [
      "signed.fits",
      "signed.fits: levels from -31802 to -7112 ADU, but a detector's counts are not negative; a BZERO of 32768 seems to be lost",
    ],
  ])("%s is a clear error", async (name, message) => {
    await expect(corrected(name)).rejects.toThrow(message);
  });

  it("axis2.fits is the upright frame once its sections are told", async () => {
    const raw = await readImage(`${FRAMES}ugly/axis2.fits`);
    const told = {
      file: "s.toml",
      detector: {
        dispersionAxis: 2 as const,
        amplifiers: [{ data: "[1:476,1:1024]", overscan: ["[1:476,1025:1056]"], place: "[1:476,1:1024]" }],
      },
    };
    const none = { inputs: [], assumptions: [], warnings: [] };
    const turned = correctFrame(raw, none, told);
    const upright = correctFrame(await readImage(path("night", "sci_01")), none);
    expect([turned.nx, turned.ny]).toEqual([1024, 476]);
    expect(sameBytes(turned.electrons, upright.electrons)).toBe(true);
  });

  it.each(["extension.fits", "packed.fits.gz", "rice.fits.fz", "trailing.fits"])(
    "%s is the plain frame",
    async (name) => {
      const plain = correctFrame(await readImage(path("night", "sci_01")), await night());
      const other = await corrected(name);
      expect(sameBytes(other.electrons, plain.electrons)).toBe(true);
      expect(sameBytes(other.mask, plain.mask)).toBe(true);
      expect(other.header.get("IMAGETYP")).toBe("object");
    },
  );

  it("bleed, dropped columns and NaN rows are masked, the rest is untouched", async () => {
    const plain = correctFrame(await readImage(path("night", "sci_01")), await night());
    const bleed = await corrected("bleed.fits");
    expect(count(bleed.mask, MaskBit.saturated)).toBe(40 * (180 + 2 * 3));
    expect(bleed.electrons[400 * 1024 + 30]).toBe(plain.electrons[400 * 1024 + 30]);
    const columns = await corrected("zero_columns.fits");
    expect(count(columns.mask, MaskBit.missing)).toBe(120 * 476);
    expect([columns.electrons[5 * 1024 + 350], columns.electrons[5 * 1024 + 500]]).toEqual([
      Number.NaN,
      plain.electrons[5 * 1024 + 500],
    ]);
    const rows = await corrected("nan_rows.fits");
    expect(count(rows.mask, MaskBit.missing)).toBe(200 * 1024);
    // Its overscan lost the same rows, so the level's curve is another one within its error.
    expect(Math.abs(rows.electrons[400 * 1024 + 30] - plain.electrons[400 * 1024 + 30])).toBeLessThan(1);
  });
});

function loadOnce<T>(load: () => Promise<T>): () => Promise<T> {
  let loaded: Promise<T> | undefined;
  return () => (loaded ??= load());
}

/** Arrays of a million are compared as bytes, which takes no time. */
function sameBytes(a: Float32Array | Uint8Array, b: Float32Array | Uint8Array): boolean {
  const bytes = ({ buffer, byteOffset, byteLength }: Float32Array | Uint8Array) =>
    Buffer.from(buffer, byteOffset, byteLength);
  return bytes(a).equals(bytes(b));
}
