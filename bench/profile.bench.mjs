// Weights of Gaussians on windows of 13 pixels, each integrated over its pixels: the kernel, a call a window into a memory that
// is kept (within an extraction there is no call between); the loop's table of erf, which is right to 1e-10 where the
// kernel's is to 1e-15; the readable reference. The same windows for all, in double precision.
import { gaussianWeights } from "../dist/reference/profile.js";
import { kernels } from "./kernel.mjs";
import { gaussianInto } from "./loop/profiles.mjs";
import { duration, times } from "./table.mjs";
import { ratio, timeInTurns } from "./timing.mjs";

export const title = "weights of Gaussians on windows of 13 pixels";

const nWindow = 13;
const sigma = 1.04;

export async function run() {
  const cases = [50, 200, 800].map(measure);
  return {
    head: ["windows", "kernel, a call each", "JS loop", "reference", "loop ÷ kernel", "reference ÷ kernel"],
    rows: cases.map(({ n, timings: { kernel, loop, reference } }) => [
      String(n),
      ...[kernel, loop, reference].map(({ median }) => duration(median)),
      times(ratio(loop, kernel)),
      times(ratio(reference, kernel)),
    ]),
    cases,
  };
}

function measure(n) {
  const centre = (k) => 7.3 + 4.917 * k;
  const first = (k) => Math.floor(centre(k) + 0.5) - 6;
  const out = new Float64Array(nWindow);
  const bench = kernels.workbench(8 * nWindow);
  const room = bench.float64(nWindow);
  const byKernel = (k) => {
    bench.call.gaussianWeights64(centre(k), sigma, first(k), nWindow, room.byteOffset);
    return room[6];
  };
  for (let k = 0; k < n; k++) {
    const expected = gaussianWeights(centre(k), sigma, first(k), nWindow);
    byKernel(k);
    requireClose("kernel", room, expected, 1e-14);
    gaussianInto(out, 0, centre(k) - first(k), Math.SQRT1_2 / sigma, nWindow);
    requireClose("loop", out, expected, 1e-10);
  }
  const each = (/** @type {(k: number) => number} */ weigh) => () => {
    let sum = 0;
    for (let k = 0; k < n; k++) sum += weigh(k);
    return sum;
  };
  const timings = timeInTurns(
    {
      kernel: each(byKernel),
      loop: each((k) => {
        gaussianInto(out, 0, centre(k) - first(k), Math.SQRT1_2 / sigma, nWindow);
        return out[6];
      }),
      reference: each((k) => gaussianWeights(centre(k), sigma, first(k), nWindow)[6]),
    },
    { milliseconds: 30 },
  );
  return { n, timings };
}

function requireClose(name, found, expected, bound) {
  if (expected.some((weight, i) => !(Math.abs(weight - found[i]) < bound)))
    throw new Error(`profile: ${name} differs.`);
}
