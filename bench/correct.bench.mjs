// The detector's side of one frame: raw counts to electrons with overscan, gain and bad pixels (no stacks), of the simulated
// frames that command.bench.mjs keeps. 'loop' does the arithmetic alone, a multiplication and a difference a pixel, over the
// two amplifiers: what the correction would cost if nothing had to be found out or checked.
import { correctFrame } from "../dist/detector/correct.js";
import { loadCalibrations } from "../dist/detector/loadCalibrations.js";
import { readImage } from "../dist/fits/image.js";
import { readSpectrograph } from "../dist/spectrograph.js";
import { sizes } from "./frame.mjs";
import { openNight } from "./night.mjs";
import { duration, times } from "./table.mjs";
import { timing } from "./timing.mjs";

export const title = "raw counts to electrons, overscan and bad pixels, two amplifiers";

/** @param {{ small?: boolean }} flags */
export async function run({ small }) {
  const cases = [];
  for (const size of sizes.slice(0, small ? 2 : 3)) cases.push(await measure(size));
  return {
    head: ["pixels", "correctFrame", "arithmetic alone, JS", "correctFrame ÷ arithmetic"],
    rows: cases.map(({ size, correct, loop }) => [
      `${size.nx} × ${size.ny}`,
      duration(correct.median),
      duration(loop.median),
      times(correct.median / loop.median),
    ]),
    cases,
  };
}

async function measure(size) {
  const { spectrograph: path, frame: file } = openNight(size);
  const spectrograph = await readSpectrograph(path);
  const calibrations = await loadCalibrations({}, spectrograph);
  const taken = { correct: [], loop: [] };
  for (let round = 0; round < 4; round++) {
    const raw = await readImage(file, { forFrame: true });
    const out = new Float32Array(size.nx * size.ny);
    const began = performance.now();
    plainArithmetic(raw.data, raw.nx, out, size.nx, size.ny);
    const between = performance.now();
    const frame = correctFrame(raw, calibrations, spectrograph, { role: "science" });
    const ended = performance.now();
    if (round === 0) requireLikeness(frame.electrons, out);
    else {
      taken.loop.push(between - began);
      taken.correct.push(ended - between);
    }
  }
  return { size, correct: timing(taken.correct), loop: timing(taken.loop) };
}

/** Gain and mean overscan of the two halves; the first half's overscan lies before the image, the other's behind it. */
function plainArithmetic(data, width, out, nx, ny) {
  const half = nx / 2;
  const nOverscan = (width - nx) / 2;
  for (let y = 0; y < ny; y++) {
    for (let amplifier = 0; amplifier < 2; amplifier++) {
      const gain = amplifier === 0 ? 1.2 : 1.25;
      const overscan = y * width + amplifier * (nOverscan + nx);
      const image = y * width + nOverscan + amplifier * half;
      let level = 0;
      for (let x = 0; x < nOverscan; x++) level += data[overscan + x];
      level /= nOverscan;
      for (let x = 0; x < half; x++) out[y * nx + amplifier * half + x] = gain * (data[image + x] - level);
    }
  }
}

/** The overscan is smoothed along the readout in one of them: within its noise, a tenth of an electron or so. */
function requireLikeness(electrons, plain) {
  let [sum, n] = [0, 0];
  electrons.forEach((value, i) => {
    if (!Number.isFinite(value)) return;
    sum += Math.abs(value - plain[i]);
    n++;
  });
  if (!(sum / n < 2))
    throw new Error(`correct: the mean difference is ${sum / n} e⁻; the layout is not as was thought.`);
}
