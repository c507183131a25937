/** Raw frames of an independent forward model, when they lie beside the project: names and traces against its truth. */
import { existsSync, readFileSync } from "node:fs";
import { describe, expect, it } from "vitest";
import { medianOf } from "../../src/detector/clip.js";
import { correctFrame } from "../../src/detector/correct.js";
import type { Frame } from "../../src/detector/frame.js";
import { loadCalibrations } from "../../src/detector/loadCalibrations.js";
import { readImage } from "../../src/fits/image.js";
import { legendreArgument, legendreValue } from "../../src/reference/legendre.js";
import { NamingError, TraceError } from "../../src/tramlines/errors.js";
import type { SlitLayout } from "../../src/tramlines/layout.js";
import { type Tracing, traceFlat } from "../../src/tramlines/trace.js";

const FRAMES = new URL("../../../shared/frames/", import.meta.url).pathname;
const here = existsSync(FRAMES);
if (!here) console.log("frames beside the project are not there: their tests are skipped");

/** What an observer knows of the slit; the scene counts positions from 0. */
function layoutOf(scene: string): SlitLayout {
  const { slit } = JSON.parse(readFileSync(`${FRAMES}${scene}/scene.json`, "utf8"));
  return {
    blocks: new Array(slit.positions / slit.per_block).fill(slit.per_block),
    pitch: slit.pitch_px,
    gap: slit.extra_gap_px,
    dead: slit.dead.map((position: number) => position + 1),
    sky: [],
  };
}

async function corrected(scene: string, files: string[]): Promise<Frame[]> {
  const raw = (name: string) => `${FRAMES}${scene}/raw/${name}.fits`;
  const calibrations = await loadCalibrations({
    bias: [raw("bias_01"), raw("bias_02"), raw("bias_03")],
    pixelFlat: [raw("dflat_01"), raw("dflat_02")],
    badPixels: `${FRAMES}${scene}/badmask.fits`,
  });
  return Promise.all(files.map(async (file) => correctFrame(await readImage(FRAMES + file), calibrations)));
}

/** Differences from the true centroids: of each fibre the root mean square, with and without the one offset common to all. */
async function compare(tracing: Tracing, scene: string, movedRows = 0) {
  const truth = await readImage(`${FRAMES}${scene}/truth/fflat_01.fits.gz`, { hdu: "TRACE" });
  const { tramlines } = tracing;
  const nCoef = tramlines.degree + 1;
  const off = Array.from({ length: tramlines.nFibre }, (_, k) =>
    Float64Array.from({ length: tramlines.nx }, (_, x) => {
      const y = legendreValue(tramlines.legendre, legendreArgument(x, tramlines.nx), k * nCoef, nCoef);
      return y - truth.data[k * tramlines.nx + x] - movedRows;
    }),
  );
  const seen = off.filter((_, k) => tramlines.state[k] !== "dead");
  const common = medianOf(seen.map((fibre) => medianOf(fibre)));
  const rms = (values: Float64Array, offset: number) =>
    Math.sqrt(values.reduce((sum, v) => sum + (v - offset) ** 2, 0) / values.length);
  const all = (offset: number) =>
    Math.sqrt(seen.reduce((sum, fibre) => sum + rms(fibre, offset) ** 2, 0) / seen.length);
  return {
    rms: all(0),
    rmsAboutCommon: all(common),
    worst: Math.max(...seen.map((fibre) => rms(fibre, 0))),
    farthest: Math.max(...seen.map((fibre) => fibre.reduce((most, v) => Math.max(most, Math.abs(v)), 0))),
  };
}

const dead = ({ tramlines }: Tracing) => tramlines.state.flatMap((state, k) => (state === "dead" ? [k + 1] : []));

describe.skipIf(!here)("fibre flats of the frames beside the project", () => {
  it("crowded: 168 fibres named, 4 dead, traced by two flats", async () => {
    const flats = await corrected("crowded", ["crowded/raw/fflat_01.fits", "crowded/raw/fflat_02.fits"]);
    const tracing = await traceFlat(flats, layoutOf("crowded"));
    expect(dead(tracing)).toEqual([10, 78, 79, 141]);
    expect(tracing.warnings).toEqual([]);
    const { rms, rmsAboutCommon, worst } = await compare(tracing, "crowded");
    // The profile is skewed: a Gaussian fitted to it stands 0.01 to 0.02 px from the centroid.
    expect(rms).toBeLessThan(0.03);
    expect(rmsAboutCommon).toBeLessThan(0.01);
    expect(worst).toBeLessThan(0.1);
  });

  it("night: 84 fibres named, 2 dead; twilight names them alike", async () => {
    const [flat, twilight] = await corrected("night", ["night/raw/fflat_01.fits", "night/raw/twi_01.fits"]);
    const tracing = await traceFlat(flat, layoutOf("night"));
    expect(dead(tracing)).toEqual([13, 66]);
    const { rms, rmsAboutCommon, worst } = await compare(tracing, "night");
    expect(rms).toBeLessThan(0.03);
    expect(rmsAboutCommon).toBeLessThan(0.012);
    expect(worst).toBeLessThan(0.1);
    expect(dead(await traceFlat(twilight, layoutOf("night")))).toEqual([13, 66]);
  });

  it("a flat moved by 1.6 pitches keeps its names", async () => {
    const [flat] = await corrected("night", ["ugly/flat_moved.fits"]);
    const tracing = await traceFlat(flat, layoutOf("night"));
    expect(dead(tracing)).toEqual([13, 66]);
    expect((await compare(tracing, "night", 8)).worst).toBeLessThan(0.1);
  });

  it("half of the slit unlit: the lit half keeps its names, and the dark one is said", async () => {
    const [flat] = await corrected("night", ["ugly/flat_half_lit.fits"]);
    const tracing = await traceFlat(flat, layoutOf("night"));
    expect(dead(tracing)).toEqual([13, ...Array.from({ length: 42 }, (_, i) => 43 + i)]);
    expect(tracing.warnings.join()).toContain("no light in fibres 43–65, 67–84, not listed as dead");
    expect((await compare(tracing, "night")).worst).toBeLessThan(0.1);
    // Without the mark of the dead fibre two blocks look like any other two.
    await expect(traceFlat(flat, { ...layoutOf("night"), dead: [] })).rejects.toThrow(NamingError);
  });

  it("an arc, a bias, a detector flat and a science frame are told from a fibre flat", async () => {
    const [arc, bias, dflat] = await corrected("night", [
      "night/raw/arc_01.fits",
      "night/raw/bias_05.fits",
      "night/raw/dflat_01.fits",
    ]);
    await expect(traceFlat(arc, layoutOf("night"))).rejects.toThrow("light only at isolated columns");
    await expect(traceFlat(bias, layoutOf("night"))).rejects.toThrow("a fibre flat");
    await expect(traceFlat(dflat, layoutOf("night"))).rejects.toThrow(TraceError);
    const [science] = await corrected("crowded", ["crowded/raw/sci_01.fits"]);
    await expect(traceFlat(science, layoutOf("crowded"))).rejects.toThrow(
      "most fibres are dark or much fainter than others",
    );
  });
});
