/** Arcs of an independent forward model, when they lie beside the project: names of lines and wavelengths against its truth. */
import { existsSync, readFileSync } from "node:fs";
import { beforeAll, describe, expect, it } from "vitest";
import { type ArcExposure, type ArcResult, measureWavelengths } from "../../src/calibration/arc.js";
import { lampLines } from "../../src/calibration/lamps.js";
import { wavelengthAt } from "../../src/calibration/wavelengths.js";
import { correctFrame } from "../../src/detector/correct.js";
import { loadCalibrations } from "../../src/detector/loadCalibrations.js";
import { extractFrame } from "../../src/extraction/extract.js";
import { Flag } from "../../src/extraction/spectra.js";
import { readImage } from "../../src/fits/image.js";
import { readTable } from "../../src/fits/table.js";
import { chooseProfile } from "../../src/tramlines/profiles.js";
import { traceFlat } from "../../src/tramlines/trace.js";
import type { Tramlines } from "../../src/tramlines/tramlines.js";

const FRAMES = new URL("../../../shared/frames/", import.meta.url).pathname;
const here = existsSync(FRAMES);
if (!here) console.log("frames beside the project are not there: their tests are skipped");

interface Job {
  exposures: ArcExposure[];
  tramlines: Tramlines;
  result: ArcResult;
}

async function reduce(scene: string, arcs: string[], lamps: string[], range: [number, number]): Promise<Job> {
  const raw = (name: string) => `${FRAMES}${scene}/raw/${name}.fits`;
  const calibrations = await loadCalibrations({
    bias: [raw("bias_01"), raw("bias_02"), raw("bias_03")],
    pixelFlat: [raw("dflat_01"), raw("dflat_02")],
    badPixels: `${FRAMES}${scene}/badmask.fits`,
  });
  const frame = async (name: string) => correctFrame(await readImage(raw(name)), calibrations);
  const { slit } = JSON.parse(readFileSync(`${FRAMES}${scene}/scene.json`, "utf8"));
  const flats = [await frame("fflat_01"), await frame("fflat_02")];
  const traced = await traceFlat(flats, {
    ...{ blocks: new Array(slit.positions / slit.per_block).fill(slit.per_block), pitch: slit.pitch_px },
    ...{ gap: slit.extra_gap_px, dead: slit.dead.map((position: number) => position + 1), sky: [] },
  });
  const { tramlines } = await chooseProfile(flats, traced.tramlines, "hermite");
  const exposures: ArcExposure[] = [];
  for (const name of arcs) {
    const { spectra } = await extractFrame(await frame(name), tramlines, { precision: "auto" });
    exposures.push({ name, spectra });
  }
  return { exposures, tramlines, result: measureWavelengths(exposures, tramlines, lampLines(lamps), range) };
}

/** px between a fibre's outermost lines: rms of all, of the worst fibre; and the rms in units of the errors claimed. */
async function score({ result: { solution }, tramlines }: Job, scene: string) {
  const wave = (await readImage(`${FRAMES}${scene}/truth/arc_01.fits.gz`, { hdu: "WAVE" })).data;
  const { nx } = solution;
  const fibres = tramlines.state.flatMap((state, k) => {
    if (state === "dead") return [];
    let [sum, n] = [0, 0];
    for (let x = Math.ceil(solution.seenFrom[k]); x <= solution.seenTo[k]; x++) {
      const perColumn = (wave[k * nx + nx - 1] - wave[k * nx]) / (nx - 1);
      sum += ((wavelengthAt(solution, k, x) - wave[k * nx + x]) / perColumn) ** 2;
      n++;
    }
    return [{ square: sum / n, ratio: sum / n / solution.error![k] ** 2 }];
  });
  const mean = (value: (one: (typeof fibres)[0]) => number) =>
    fibres.reduce((sum, one) => sum + value(one), 0) / fibres.length;
  return {
    rms: Math.sqrt(mean(({ square }) => square)),
    worst: Math.sqrt(Math.max(...fibres.map(({ square }) => square))),
    ratio: Math.sqrt(mean(({ ratio }) => ratio)),
  };
}

async function misnamed({ result: { lines, list } }: Job, scene: string) {
  const table = await readTable(`${FRAMES}${scene}/truth/arc_01.fits.gz`, "LINES");
  const column = (name: string) => table.columns.find((one) => one.name === name)!.data as Float64Array;
  const [fibre, x, wave] = [column("FIBRE"), column("X"), column("WAVE")];
  const rows = Array.from(fibre, (_, i) => i);
  return lines.filter(({ used, peak, line, ...one }) => {
    if (!used) return false;
    const own = rows.filter((i) => fibre[i] === one.fibre + 1 && Math.abs(x[i] - peak.x) < 1);
    return !own.some((i) => Math.abs(wave[i] - list.wavelength[line]) < 0.05);
  });
}

describe.skipIf(!here)("arcs of the frames beside the project", () => {
  let night: Job;
  let crowded: Job;
  beforeAll(async () => {
    night = await reduce("night", ["arc_01", "arc_02"], ["Ne", "Ar"], [5780, 7420]);
    crowded = await reduce("crowded", ["arc_01"], ["Ne", "Ar", "Hg", "Cu"], [7390, 5600]);
  }, 240_000);

  it.each(["night", "crowded"])(
    "%s: no line misnamed, wavelengths good to 0.005 px, errors that hold",
    async (scene) => {
      const job = scene === "night" ? night : crowded;
      expect(await misnamed(job, scene)).toEqual([]);
      const { rms, worst, ratio } = await score(job, scene);
      // Asked for are 0.02 and 0.05; seen are 0.001 and 0.003.
      expect(rms).toBeLessThan(0.005);
      expect(worst).toBeLessThan(0.02);
      expect(ratio).toBeLessThan(2);
      expect(job.result.warnings).toEqual([]);
    },
  );

  it("night: the second arc lies where it was put", () => {
    expect(night.result.fit.exposure[1]).toBeCloseTo(-0.025, 3);
  });

  it("no bright line is taken for a cosmic ray", () => {
    for (const { exposures, result } of [night, crowded]) {
      const bright = result.lines.filter(({ peak }) => peak.snr > 100);
      const hit = bright.filter(({ exposure, fibre, peak }) => {
        const { flags, nx } = exposures[exposure].spectra;
        return (flags[fibre * nx + Math.round(peak.x)] & Flag.cosmicRay) !== 0;
      });
      expect(bright.length).toBeGreaterThan(1500);
      expect(hit.length).toBeLessThan(0.002 * bright.length);
    }
  });
});
