// What comes before and beside the extraction, on simulated frames that lie read and corrected in memory: tracing one flat with
// Gaussians, held against the extraction's passes over a frame of that size (settled to the end, cosmic rays grown), both on
// one thread; the empirical profile from two flats and its refinement on a science frame, each on two threads.
import { correctFrame } from "../dist/detector/correct.js";
import { loadCalibrations } from "../dist/detector/loadCalibrations.js";
import { runPasses } from "../dist/extraction/passes.js";
import { openFrame } from "../dist/extraction/settle.js";
import { readImage } from "../dist/fits/image.js";
import { loadKernels } from "../dist/kernels/module.js";
import { readSpectrograph } from "../dist/spectrograph.js";
import { chooseProfile } from "../dist/tramlines/profiles.js";
import { activeFibres, linesOf } from "../dist/tramlines/profileTable.js";
import { refineShape } from "../dist/tramlines/shape/refine.js";
import { traceFlat } from "../dist/tramlines/trace.js";
import { sizes } from "./frame.mjs";
import { kernels, onTwoThreads } from "./kernel.mjs";
import { openNight } from "./night.mjs";
import { duration, times } from "./table.mjs";
import { ratio, timeAwaited, timing } from "./timing.mjs";

export const title = "tracing and profiles of simulated flats, frames read and corrected before";

/** @param {{ small?: boolean }} flags */
export async function run({ small }) {
  const cases = [];
  for (const [i, size] of sizes.slice(0, small ? 1 : 3).entries()) cases.push(await measure(size, [5, 3, 3][i]));
  return {
    head: [
      "fibres × columns",
      "extraction, 1 thread",
      "tracing a flat, 1 thread",
      "tracing ÷ extraction",
      "empirical profile of two flats, 2 threads",
      "refining it, 2 threads",
    ],
    rows: cases.map(({ size, timings: { extraction, tracing, empirical, refining } }) => [
      `${size.nFibre} × ${size.nx}`,
      duration(extraction.median),
      duration(tracing.median),
      times(ratio(tracing, extraction)),
      duration(empirical.median),
      duration(refining.median),
    ]),
    cases,
  };
}

async function measure(size, rounds) {
  const night = openNight(size);
  const spectrograph = await readSpectrograph(night.spectrograph);
  const calibrations = await loadCalibrations({}, spectrograph);
  const open = async (path, role) => correctFrame(await readImage(path), calibrations, spectrograph, { role });
  const flats = [await open(night.flats[0], "fibre flat"), await open(night.flats[1], "fibre flat")];
  const frame = await open(night.frame, "science");
  const { slit } = spectrograph;
  const layout = { blocks: slit.blocks, pitch: slit.pitch, gap: slit.gap ?? 0, dead: slit.dead, sky: slit.sky };
  const gaussian = (await traceFlat(flats[0], layout)).tramlines;
  const { tramlines } = await chooseProfile(flats, gaussian, "empirical");
  const extraction = passes(frame, gaussian);
  const { profile } = tramlines;
  if (profile.kind === "gaussian") throw new Error("chain: the profile is a Gaussian, where a table was asked for.");
  const seen = passes(frame, tramlines);
  seen.run();
  const lines = linesOf(tramlines, activeFibres(tramlines));
  const alone = await inTurns(rounds, {
    extraction: async () => extraction.run(),
    tracing: () => traceFlat(flats[0], layout),
  });
  const together = await onTwoThreads(async () => {
    const shared = await loadKernels();
    const { background, rejected } = seen;
    return inTurns(rounds, {
      empirical: () => chooseProfile(flats, gaussian, "empirical"),
      refining: async () => refineShape(shared, profile.known, profile.shape, lines, frame, background, rejected),
    });
  });
  return { size, timings: { ...alone, ...together } };
}

/** @param {number} rounds @param {Record<string, () => Promise<unknown>>} tasks */
async function inTurns(rounds, tasks) {
  const taken = Object.fromEntries(Object.keys(tasks).map((name) => [name, /** @type {number[]} */ ([])]));
  for (let round = -1; round < rounds; round++) {
    for (const [name, task] of Object.entries(tasks)) {
      const milliseconds = await timeAwaited(task);
      if (round >= 0) taken[name].push(milliseconds); // the round before the first warms up
    }
  }
  return Object.fromEntries(Object.entries(taken).map(([name, list]) => [name, timing(list)]));
}

/** A frame opened as the command does, in single precision; `run` does all passes anew. */
function passes(frame, tramlines) {
  const { bench, input, background } = openFrame(kernels, frame, tramlines, { precision: "f32" });
  const run = () => {
    bench.rejected.fill(0);
    runPasses(bench, input);
  };
  return { run, background, rejected: bench.rejected };
}
