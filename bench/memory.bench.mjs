// Peak memory of `hatchel extract`, raw 16-bit FITS and ready tramlines to spectra, no calibration images; and with --huge
// of a frame of 10240 × 10240 pixels with 2000 fibres, made for this alone (bench/hugeNight.mjs).
import { rmSync, statSync } from "node:fs";
import { sizes } from "./frame.mjs";
import { openHugeNight } from "./hugeNight.mjs";
import { executable, hatchel, openNight } from "./night.mjs";
import { peakOf } from "./peak.mjs";
import { duration, figures, times } from "./table.mjs";
import { timeAwaited } from "./timing.mjs";

export const title = "peak memory of a whole process, hatchel extract, raw FITS to spectra, joint";

/** @param {{ small?: boolean, huge?: boolean }} flags */
export async function run({ small, huge }) {
  const refineOff = hatchel(["extract", "--help"]).includes("--refine") ? ["--refine", "off"] : [];
  const idle = peakOf(["-e", ""]);
  const nights = [
    ...sizes.slice(small ? 0 : 2, small ? 1 : 3).map((size) => ({ size, night: openNight(size) })),
    ...(huge ? [await openHugeNight()] : []),
  ];
  const cases = [];
  for (const { size, night } of nights) {
    const { frame, output, tramlines, spectrograph } = night;
    const files = [frame, "-o", output, "--tramlines", tramlines, "--spectrograph", spectrograph];
    const options = ["--precision", "f32", "--force", "--quiet", ...refineOff];
    let peakBytes = 0;
    const milliseconds = await timeAwaited(async () => {
      peakBytes = peakOf([executable, "extract", ...files, ...options]) - idle;
    });
    const leastBytes = 4 * size.nx * size.ny + statSync(output).size;
    rmSync(output);
    cases.push({ size, peakBytes, leastBytes, milliseconds });
  }
  return {
    head: ["fibres, frame", "peak memory", "frame as Float32 + spectra", "peak ÷ (frame + spectra)", "once, time"],
    rows: cases.map(({ size, peakBytes, leastBytes, milliseconds }) => [
      `${size.nFibre}, ${size.nx} × ${size.ny}`,
      `${figures(peakBytes / 2 ** 20)} MiB`,
      `${figures(leastBytes / 2 ** 20)} MiB`,
      times(peakBytes / leastBytes),
      duration(milliseconds),
    ]),
    notes: [`Peak memory is less what an idle Node holds, ${figures(idle / 2 ** 20)} MiB.`],
    cases,
  };
}
